"""From rows to seconds, and from rows to the trace on the screen."""

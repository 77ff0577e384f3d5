"""The morning page: what happened, in order of importance, made from the logs alone."""

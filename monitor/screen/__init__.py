"""The terminal dashboard: one sheet of text, drawn from what `monitor.view` holds."""

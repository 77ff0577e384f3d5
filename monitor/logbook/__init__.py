"""The log: what is recorded and replayed, its text, its files."""

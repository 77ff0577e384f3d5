"""How fast, how lean: `python -m tests.speed` measures and prints one table."""

"""Salt water: its conductivity, how temperature acts on it, its density, mixing of its units."""

from monitor.water.media import Medium, OutOfRangeError, medium

__all__ = ["Medium", "OutOfRangeError", "medium"]

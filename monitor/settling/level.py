"""Where the water stands still, and whether it has left that level without a dose.

The level follows slow changes (evaporation, a fouling probe) four minutes behind, so that a faster
change stands out against it. A second costs a few Python floats.
"""

from __future__ import annotations

import math

from monitor.blocks import NAN

BLOCK = 10  # readings
FOLLOWS = 24  # blocks: a change slower than a band in so many is followed
LEFT_BANDS, LEFT_NOISES = 3.0, 6.0  # off the level by both: a disturbance


class Level:
    """The still level and how far the filtered salinity may be from it, %."""

    def __init__(self, band_pct: float) -> None:
        self.band = band_pct
        self.pct = NAN
        self.bound = math.inf
        self._blocks = 0  # that the level is a mean of
        self._sum, self._count = 0.0, 0

    def add(self, salinity_pct: float) -> None:
        """One more quiet reading."""
        self._sum += salinity_pct
        self._count += 1
        if self._count == BLOCK:
            self._follow(self._sum / BLOCK)
            self._sum, self._count = 0.0, 0

    def left(self, filtered_pct: float) -> bool:
        """Whether the filtered value is off the level (never, where there is none yet)."""
        return abs(filtered_pct - self.pct) > self.bound

    def widen(self, noise_pct: float) -> None:
        """Set the bound by the noise of a second's mean."""
        self.bound = max(LEFT_BANDS * self.band, LEFT_NOISES * noise_pct)

    def stands_at(self, salinity_pct: float) -> None:
        """The water has come to rest here."""
        self.restart()
        self.pct = salinity_pct
        self._blocks = 2

    def restart(self) -> None:
        """Readings so far are not followed by more of the same; the level stays until then."""
        self._sum, self._count = 0.0, 0
        self._blocks = 0

    def forget(self) -> None:
        """Nothing is known of the level any more."""
        self.restart()
        self.pct = NAN

    def _follow(self, mean_pct: float) -> None:
        if self.pct != self.pct:
            self.pct = mean_pct
        self._blocks = min(self._blocks + 1, FOLLOWS)
        self.pct += (mean_pct - self.pct) / self._blocks

"""The last twenty minutes of readings, a second each, and what still water looked like in them."""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass

import numpy as np

KEEP = 1200  # seconds with a reading: a dose may be recorded late
LEVEL_OF = 30  # readings that give the level
NOISE_OF = 180  # and the noise
FEWEST = 10  # readings before their noise is believed
FLICKER = 2e-4  # of the level: what does not average out

Bin = tuple[int, float, float, float, float]  # k, salinity %, filtered %, period us, temperature C


@dataclass(frozen=True)
class Still:
    """Water that stood still: level, noise of a second's mean, and the raw figures behind it."""

    level_pct: float
    noise_pct: float
    u_pct: float  # standard doubt of the level by noise alone
    period_us: float
    temp_c: float

    @property
    def floor_var(self) -> float:
        """%^2, variance of a second's mean about still water."""
        return self.noise_pct**2 + (FLICKER * self.level_pct) ** 2


class History:
    """Readings by the second, and from when on they were quiet."""

    def __init__(self) -> None:
        self.bins: deque[Bin] = deque(maxlen=KEEP)
        self.starts: deque[tuple[float, float]] = deque(maxlen=64)  # known at t, quiet from t
        self.noise_pct = math.nan

    def quiet_from(self, known_t: float, from_t: float) -> None:
        """From `from_t` on the water stood still, as is known since `known_t`."""
        self.starts.append((known_t, from_t))

    def forget_from(self, t: float) -> None:
        """Drop the readings of a time that turned out to be a fault's."""
        while self.bins and self.bins[-1][0] + 1 > t:
            self.bins.pop()

    def since(self, t: float) -> list[Bin]:
        """Readings of the seconds whose middle is at or after t."""
        kept = []
        for reading in reversed(self.bins):
            if reading[0] + 0.5 < t:
                break
            kept.append(reading)
        return kept[::-1]

    def filtered_at(self, t: float) -> float:
        """The filtered value at t; NaN if there is none."""
        for reading in reversed(self.bins):
            if reading[0] + 1 <= t:
                return reading[2]
        return math.nan

    def still(self, before_t: float) -> Still | None:
        """The still water before `before_t`, by what was known then; None if none was seen."""
        quiet = self._quiet(before_t)
        if not quiet:
            return None
        table = np.array(quiet[:LEVEL_OF])
        level = float(table[:, 1].mean())
        noise = self.noise(quiet, level)
        return Still(
            level,
            noise,
            math.hypot(noise / math.sqrt(len(table)), FLICKER * level),
            float(table[:, 3].mean()),
            float(table[:, 4].mean()),
        )

    def noise(self, quiet: list[Bin], level: float) -> float:
        """Standard deviation of a second's mean, from neighbours' differences."""
        if len(quiet) >= FEWEST:
            size = np.abs(np.diff(np.array([reading[1] for reading in quiet])))
            middle, square = float(np.median(size)), float(np.sqrt(np.mean(size * size)))
            self.noise_pct = max(1.4826 * middle, 0.7 * square) / math.sqrt(2.0)
        return self.noise_pct if self.noise_pct == self.noise_pct else 5e-4 * level

    def _quiet(self, before_t: float) -> list[Bin]:
        """Up to NOISE_OF quiet readings before the time, newest first."""
        began = -math.inf
        for known_t, from_t in self.starts:
            if known_t <= before_t:
                began = from_t
        quiet: list[Bin] = []
        for reading in reversed(self.bins):
            if reading[0] + 1 > before_t:
                continue
            if reading[0] + 1 <= began or len(quiet) == NOISE_OF:
                break
            quiet.append(reading)
        return quiet

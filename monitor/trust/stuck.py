"""`stuck`: the very same figure, longer than chance allows.

The chance that a reading repeats is greatest with the level in the middle of a tick:
q = erf(tick/2 / (sqrt 2 sd)). A run of n is called at q^n < 1e-9 (below 1e-4 false an hour at
20 readings/s), or when the temperature moved by more than tick and noise could hide.
"""

from __future__ import annotations

import math
from collections import deque
from typing import NamedTuple

from monitor.blocks import NAN, Second
from monitor.trust.level import Level

LEAST_N, LEAST_S = 12, 3.0
LONGER = 2.5  # times the longest of the last 30 runs
SURER = 1.25  # times what chance gives: the noise is known to some 10 %
CHANCE_LN = math.log(1e-9)
WARM_S = 40.0
PER_C = 0.0212  # of the period, a Celsius


class Run(NamedTuple):
    """A run of equal figures that chance does not explain."""

    from_t: float
    n: int
    period_us: float
    chance: float  # the longest that chance gives


class Stuck:
    """The run of equal figures that is going on, and how long runs were lately."""

    def __init__(self) -> None:
        self._figure = NAN
        self._from_t = 0.0
        self._n = 0
        self._temp_c = NAN
        self._lengths: deque[int] = deque(maxlen=30)
        self._before: Second | None = None
        self.ended_t: float | None = None  # set in the second in which the run broke

    def calm(self, second: Second) -> None:
        """A second whose figures differ."""
        self.ended_t = None
        if self._n:
            self._break(second)
        self._before = second

    def step(self, second: Second, level: Level) -> Run | None:
        """One closed second with pulses; the run, while it is longer than chance allows."""
        if second.low_us != second.high_us:
            self.calm(second)
            return None
        self.ended_t = None
        if not self._n:
            self._begin(second)
        elif second.low_us != self._figure:
            self._break(second)
            self._begin(second)
        else:
            self._n += second.n_rows - second.zeros
        self._before = second
        return self._judge(second, level)

    def _begin(self, second: Second) -> None:
        self._figure = second.low_us
        self._from_t = float(second.time_s[0])
        self._n = second.n_rows - second.zeros
        self._temp_c = second.temp_used_c
        before = self._before
        if before is None or before.k < second.k - 2 or before.low_us == before.high_us:
            return
        period, times = before.period_us, before.time_s
        for i in range(len(period) - 1, -1, -1):
            if period[i] != self._figure:
                return
            self._n += 1
            self._from_t = float(times[i])

    def _break(self, second: Second) -> None:
        other = second.period_us
        differs = (other != self._figure) & (other > 0)
        self.ended_t = float(second.time_s[differs][0])
        self._lengths.append(self._n)
        self._n = 0

    def _judge(self, second: Second, level: Level) -> Run | None:
        n = self._n
        if n < LEAST_N or second.t - self._from_t < LEAST_S:
            return None
        sd_us = 0.85 * min(level.standards_noise, 1.3 * level.noise) * self._figure
        q = math.erf(0.5 * level.tick_us / (math.sqrt(2.0) * max(sd_us, 1e-9)))
        q = min(q, 1.0 - 1e-12)
        chance = CHANCE_LN / math.log(q) if q > 0 else 0.0
        found = Run(self._from_t, n, self._figure, max(chance, 1.0))
        if n > SURER * chance and n > LONGER * max(self._lengths, default=0):
            return found
        warmed = abs(second.temp_used_c - self._temp_c) * PER_C * self._figure
        if second.t - self._from_t >= WARM_S and warmed > 3.0 * level.tick_us + 3.0 * sd_us:
            return found
        return None

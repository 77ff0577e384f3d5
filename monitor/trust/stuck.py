"""`stuck`: the very same figure, longer than chance allows.

The chance that a reading repeats is greatest with the level in the middle of a tick:
q = erf(tick/2 / (sqrt 2 sd)). A run of n is called at q^n < 1e-9 (below 1e-4 false an hour at
20 readings/s), or when the temperature moved by more than tick and noise could hide.
"""

from __future__ import annotations

import math
from collections import deque

from monitor.blocks import NAN, Second
from monitor.findings import Finding
from monitor.trust.force import InForce
from monitor.trust.level import Level

LEAST_N, LEAST_S = 12, 3.0
LONGER = 2.5  # times the longest of the last 30 runs
CHANCE_LN = math.log(1e-9)
SURER = 1.25  # times what chance gives: the noise is known to some 10 %
WARM_S = 40.0
PER_C = 0.0212  # of the period, a Celsius


class Stuck:
    """The run of equal figures that is going on, and how long runs were lately."""

    def __init__(self) -> None:
        self._figure = NAN  # of the run that is going on; NaN: none
        self._n = 0  # in its whole seconds; the one before may hold some more
        self._first: Second | None = None
        self._before: Second | None = None  # the second before the first
        self._newest: Second | None = None
        self._temp_c = NAN
        self._lengths: deque[int] = deque(maxlen=30)
        self._held = NAN  # the figure of the fault in force

    def suspects(self, second: Second, level: Level) -> bool:
        """Take a second with pulses; whether its figure repeats longer than chance allows."""
        figure = second.low_us
        if figure != second.high_us or figure != self._figure:
            self._turn(second, figure)
        self._newest = second
        if self._figure != self._figure:
            return False
        self._n += second.n_rows - second.zeros
        if self._n < LEAST_N:
            return False
        longer = self._n > LONGER * max(self._lengths, default=0)
        return (longer and self._n > SURER * self._by_chance(level)) or self._warmed(second, level)

    def judge(self, second: Second, suspected: bool, level: Level, force: InForce) -> list[Finding]:
        """`stuck` begun or ended in this second."""
        if "stuck" in force:
            return self._ended(second, force)
        if not suspected or "short" in force:
            return []
        from_t, n = self._beginning()
        if second.t - from_t < LEAST_S:
            return []
        self._held = self._figure
        text = (
            f"{n} times {self._figure:.10g} us in {second.t - from_t:.0f} s,"
            f" chance gives at most {max(self._by_chance(level), 1.0):.0f}"
        )
        return [force.begin("stuck", second.t, from_t, text)]

    def _turn(self, second: Second, figure: float) -> None:
        """A run is over; another may begin with this second."""
        if self._n:
            self._lengths.append(self._n)
        self._n, self._figure = 0, NAN
        if figure == second.high_us:
            self._figure = figure
            self._first, self._before = second, self._newest
            self._temp_c = second.temp_used_c

    def _by_chance(self, level: Level) -> float:
        """The longest run that chance gives."""
        sd_us = 0.85 * min(level.standards_noise, 1.3 * level.noise) * self._figure
        q = math.erf(0.5 * level.tick_us / (math.sqrt(2.0) * max(sd_us, 1e-9)))
        return CHANCE_LN / math.log(min(q, 1.0 - 1e-12)) if q > 0.0 else 0.0

    def _warmed(self, second: Second, level: Level) -> bool:
        """The water's warmth moved by more than tick and noise can hide."""
        assert self._first is not None
        moved_us = abs(second.temp_used_c - self._temp_c) * PER_C * self._figure
        sd_us = 0.85 * min(level.standards_noise, 1.3 * level.noise) * self._figure
        return second.k - self._first.k >= WARM_S and moved_us > 3.0 * (level.tick_us + sd_us)

    def _beginning(self) -> tuple[float, int]:
        """When the run began, its readings in the second before counted, and how many it holds."""
        first, before = self._first, self._before
        assert first is not None
        from_t, n = float(first.time_s[0]), self._n
        if before is None or before.k < first.k - 2:
            return from_t, n
        for t, period in zip(before.time_s[::-1].tolist(), before.period_us[::-1].tolist()):
            if period != self._figure:
                break
            from_t, n = t, n + 1
        return from_t, n

    def _ended(self, second: Second, force: InForce) -> list[Finding]:
        pulse = second.period_us > 0
        if self._held != self._held:  # of the run before
            self._held = float(second.period_us[pulse][0])
        differs = pulse & (second.period_us != self._held)
        if not differs.any():
            return []
        self._held = NAN
        return [force.end("stuck", second.t, float(second.time_s[differs][0]))]

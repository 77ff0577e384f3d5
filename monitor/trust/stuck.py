"""`stuck`: the very same figure, longer than chance allows.

A reading repeats with a chance q that noise, tick and the level's place in the tick give; the place
is known from the minutes before, as far as the level may have wandered since. A run of n is called
at q^n < 1e-9, or when the temperature moved by more than tick and noise could hide.

With the noise known that is below 1e-4 false an hour at 20 readings/s. Noise below a third of a
tick is not known, and taken too great: there false ones were met, one in 525 h without a fault.
"""

from __future__ import annotations

import itertools
import math
from collections import deque

from monitor.blocks import NAN, Second
from monitor.findings import Finding
from monitor.trust.force import InForce
from monitor.trust.level import LEAST_TICKS, Level

LEAST_N, LEAST_S = 12, 3.0
LONGER = 2.5  # times the longest of the last 30 runs
CHANCE_LN = math.log(1e-9)
SURER = 1.25  # times what chance gives: the noise is known to some 10 %
WARM_S = 40.0
PER_C = 0.0212  # of the period, a Celsius
CHUNK_S, CHUNKS = 20, 6  # means that tell where the level stood, and how it wanders
MEANS_KEPT = 300
DOUBT_TICKS, NEAR_TICKS = 0.05, 0.75
HIDDEN_TICKS = 0.1


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
        self._means: deque[float] = deque(maxlen=MEANS_KEPT)  # us, a second
        self._held = NAN  # the figure of the fault in force

    def suspects(self, second: Second, level: Level) -> bool:
        """Take a second with pulses; whether its figure repeats longer than chance allows."""
        figure = second.low_us
        if figure != second.high_us or figure != self._figure:
            self._turn(second, figure)
        self._newest = second
        self._means.append(second.mean_us)
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
        if not suspected:
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
        tick = level.tick_us
        off = self._off_us(tick)
        scale = 1.0 / (math.sqrt(2.0) * max(self._sd_us(level), 1e-9))
        q = 0.5 * (math.erf((0.5 * tick - off) * scale) + math.erf((0.5 * tick + off) * scale))
        return CHANCE_LN / math.log(min(q, 1.0 - 1e-12)) if q > 0.0 else 0.0

    def _sd_us(self, level: Level) -> float:
        """Noise of one reading, rather too small: beside the tick any less looks the same."""
        seen_us = 1.3 * level.noise * self._figure
        if level.told_noise is not None:
            return 0.85 * min(level.told_noise * self._figure, seen_us)
        hidden = level.learned == 0 or seen_us < 1.4 * LEAST_TICKS * level.tick_us
        return HIDDEN_TICKS * level.tick_us if hidden else 0.85 * seen_us

    def _off_us(self, tick_us: float) -> float:
        """How far from the middle of the figure's tick the level is for sure."""
        assert self._first is not None
        assert self._newest is not None
        run_s = self._newest.k - self._first.k + 1
        means = list(self._means)[: -run_s - 1] if run_s + 1 < len(self._means) else []
        chunks = [
            sum(means[end - CHUNK_S : end]) / CHUNK_S
            for end in range(len(means), CHUNK_S - 1, -CHUNK_S)[:CHUNKS]
        ]
        if len(chunks) < 3 or any(chunk != chunk for chunk in chunks):
            return 0.0
        off_us = abs(chunks[0] - self._figure)
        if off_us > NEAR_TICKS * tick_us:  # the level has jumped since
            return 0.0
        wander = max(abs(a - b) for a, b in itertools.pairwise(chunks))
        trend = abs(chunks[0] - chunks[-1]) / (len(chunks) - 1)
        doubt = 1.5 * wander + trend * run_s / CHUNK_S + DOUBT_TICKS * tick_us
        return max(off_us - doubt, 0.0)

    def _warmed(self, second: Second, level: Level) -> bool:
        """The water's warmth moved by more than tick and noise can hide."""
        assert self._first is not None
        moved_us = abs(second.temp_used_c - self._temp_c) * PER_C * self._figure
        hidden_us = 3.0 * (level.tick_us + self._sd_us(level))
        return second.k - self._first.k >= WARM_S and moved_us > hidden_us

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

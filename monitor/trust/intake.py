"""From seconds to minutes that only a slow change can have moved.

Rules:
- Seconds count while the level is sure, the probe is in the tank, and no dose, recorded water or
  unrecorded step is under 15 min old. Each of these begins a new segment.
- A level found again more than 1.5 % from where it was lost has stepped, a dose apart.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from itertools import compress
from typing import NamedTuple, Protocol

from monitor import bench
from monitor.blocks import Second
from monitor.dosing.ledger import Change, Dose, Struck
from monitor.trust.measures import hampel_bounds
from monitor.trust.minutes import Minutes
from monitor.water.media import medium

LEAST_S = 20  # sure seconds a minute; fewer where readings come less than once a second
FEWEST = 3
SETTLE_S = 900  # after a dose or step nothing is called slow
STEP = 0.015  # ln
WARMTH_POWER = 0.98  # period above the circuit's own goes as conductivity^-0.98: polarisation
POWER = 0.95  # period above the circuit's own goes as salinity^-0.95 (fits PSS-78 and NaCl to 2 %)


class Levelled(Protocol):
    """What is asked of the level's judge."""

    locked: bool
    in_gate_ln: float
    m: float
    noise: float
    tick_us: float
    rate_hz: float


class Jump(NamedTuple):
    """The level was lost and found again elsewhere, and no dose explains it."""

    lost_t: float
    step: float  # ln


class Intake:
    """Gathers one probe's minutes."""

    def __init__(self, settings: bench.Probe) -> None:
        self.minutes = Minutes()
        self.segment = 0
        self.slope = 0.0  # ln an hour, expected to go on while nothing is taken
        self.jump: Jump | None = None  # met in this second
        self.floor_us = floor_us(settings.standards_in_force)
        self.paused_t = -math.inf  # when taking up was last put off
        self._medium = medium(settings.medium)
        self._quiet_t = 0.0  # the first second that may be taken up again
        self._out = self._locked = False
        self._left: tuple[float, float, float] | None = None  # time, level, temperature
        self._levels: list[float] = []  # of this minute
        self._salinities: list[float] = []
        self._warmth = 0.0

    def step(self, second: Second, level: Levelled, changes: Sequence[Change]) -> bool:
        """One closed second; True when it closed a minute that counts."""
        if changes:
            self._changed(second.t, changes)
        if second.events:
            for event in second.events:
                if event.kind in ("out", "back"):
                    self._out = event.kind == "out"
        locked = level.locked and not self._out
        if locked is not self._locked:
            self._turned(second, level, locked)
        ln_us = level.in_gate_ln
        if locked and ln_us == ln_us and second.k >= self._quiet_t:
            self._levels.append(ln_us)
            self._salinities.append(second.salinity_pct)
            self._warmth += second.temp_used_c
        return second.k % 60 == 59 and self._minute(second.t, level.rate_hz)

    def _changed(self, t: float, changes: Sequence[Change]) -> None:
        for change in changes:
            if not isinstance(change, Struck):
                self.pause(max(change.end_s, t) if isinstance(change, Dose) else t)

    def pause(self, t: float) -> None:
        """Take nothing up until 15 min after t; what comes then is a new segment."""
        self.paused_t = t
        self._quiet_t = max(self._quiet_t, t + SETTLE_S)
        self.segment += 1
        self._begin_minute()

    def carry(self) -> dict[str, float]:
        """Until when nothing is to be taken up."""
        if self.paused_t == -math.inf:
            return {}
        return {"paused_t": self.paused_t, "quiet_t": self._quiet_t}

    def resume(self, carried: Mapping[str, float]) -> None:
        """Go on with what `carry` gave."""
        self.paused_t = carried.get("paused_t", self.paused_t)
        self._quiet_t = carried.get("quiet_t", self._quiet_t)

    def begin_anew(self, t: float) -> None:
        """Nothing before t tells of what comes."""
        self.segment += 1
        self.minutes.forget(t)

    def _turned(self, second: Second, level: Levelled, locked: bool) -> None:
        """The level is lost, or found again: where?"""
        self._locked = locked
        if not locked:
            if self._left is None:
                self._left = second.t, level.m, second.temp_used_c
            return
        left, self._left = self._left, None
        if left is None or second.k < self._quiet_t:  # a dose may have moved it anywhere
            return
        lost_t, before, temp_c = left
        step = self._level(level.m, second.temp_used_c) - self._level(before, temp_c)
        self.jump = Jump(lost_t, step)
        if abs(step) > STEP:
            self.pause(second.t)

    def _level(self, ln_us: float, temp_c: float) -> float:
        """ln of the period above the circuit's own, at 25 C where there is a thermometer."""
        level = math.log(max(math.exp(ln_us) - self.floor_us, 1.0))
        if temp_c == temp_c:
            level += WARMTH_POWER * math.log(self._medium.sensitivity(temp_c)[0])
        return level

    def _begin_minute(self) -> None:
        self._levels, self._salinities, self._warmth = [], [], 0.0

    def _minute(self, t: float, rate_hz: float) -> bool:
        levels, salinities, warmth = self._levels, self._salinities, self._warmth
        self._begin_minute()
        n = len(levels)
        if n < max(LEAST_S * min(rate_hz, 1.0), FEWEST):
            return False
        temp_c = warmth / n
        low, high = hampel_bounds(levels)
        if min(levels) < low or max(levels) > high:
            kept = [low <= level <= high for level in levels]
            levels, salinities = list(compress(levels, kept)), list(compress(salinities, kept))
            n = len(levels)
        level = self._level(sum(levels) / n, temp_c)
        self.minutes.add(t, level, temp_c, sum(salinities) / n, self.segment, self.slope)
        return True


def floor_us(standards: Sequence[bench.Standard]) -> float:
    """Period of the circuit alone: intercept of the standards' periods on salinity^-0.95.

    Between 2 us and 0.3 of the shortest period; 0 with fewer than two different salinities.
    """
    rows = [
        (math.pow(s.salinity_pct, -POWER), s.period_us) for s in standards if s.salinity_pct > 0.0
    ]
    n = len(rows)
    if n < 2:
        return 0.0
    x0, p0 = (sum(row[i] for row in rows) / n for i in (0, 1))
    xx = sum((x - x0) * (x - x0) for x, _ in rows)
    if xx <= 0.0:
        return 0.0
    slope = sum((x - x0) * (p - p0) for x, p in rows) / xx
    return min(max(p0 - slope * x0, 2.0), 0.3 * min(p for _, p in rows))

"""`bubbles` and `loose-lead`: readings that leave the level for a moment and come back.

A bubble on an electrode makes the period jump up by up to 2.6 times, one-sided and at random times
(Poisson). A loose lead makes it jump far up or down. Two crossings of a 5 sd gate within a minute
by noise alone: less than once in 1000 h at 20 readings/s, the noise known to 10 %.
"""

from __future__ import annotations

import itertools
import math
from collections import deque
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from monitor.blocks import Floats, Second
from monitor.findings import Finding
from monitor.trust.force import InForce
from monitor.trust.hum import Hum
from monitor.trust.level import INNER, Judged, Level

WINDOW_S = 60.0
JOIN_S = 0.6  # jumps nearer than this on one side are one
WIDEST_S = 6.0  # longer is no jump but another level
BIG_UP, BIG_DOWN = math.log(2.6), math.log(0.65)
BIG_WIDEST_S = 2.5
LEAST_BIG = 2
TALL = 3.0  # times a full jump's height: weighs half as much again
LEAST_UPS, LEAST_UPS_DOSE, LEAST_UPS_MIXING = 2.0, 3.0, 4.0
CLEAR = (4.0, 40.0, 120.0)  # mean intervals, at least s, at most s without a jump


class Jump(NamedTuple):
    """One excursion from the level and back."""

    t: float
    end_t: float
    height: float  # ln, signed, the farthest reading
    weight: float  # 1, or half where it hardly leaves the gate

    @property
    def big(self) -> bool:
        """Too far for a bubble."""
        far = self.height > BIG_UP or self.height < BIG_DOWN
        return far and self.end_t - self.t <= BIG_WIDEST_S


class Jumps:
    """The jumps of the last minute."""

    def __init__(self) -> None:
        self.last: deque[Jump] = deque(maxlen=400)
        self.end_t: float | None = None  # of the newest jump while a fault of them is in force
        self._open: list[float] | None = None  # from t, to t, height
        self._edges: deque[tuple[int, int, int]] = deque(maxlen=64)  # k, above and below inner

    def forget(self) -> None:
        """Nothing that came before counts any more."""
        self.last.clear()
        self._open = None
        self._edges.clear()

    def judge(
        self, second: Second, judged: Sequence[Judged], level: Level, hum: Hum, force: InForce
    ) -> list[Finding]:
        """`bubbles` or `loose-lead` begun or ended in this second."""
        t = second.t
        for each in judged:
            self.take(each, full_height(each, level))
        found: list[Finding] = []
        if force.any_of("bubbles", "loose-lead"):
            found = self._ended(t, force)
        recent = self.recent(t)
        if judged and recent:
            found += self._begun(t, recent, level, hum, force)
        elif not recent and not force.said:
            self.last.clear()
        return found

    def _begun(
        self, t: float, recent: list[Jump], level: Level, hum: Hum, force: InForce
    ) -> list[Finding]:
        if "loose-lead" in force:
            return []
        if is_loose(recent):
            said = [force.begin("loose-lead", t, recent[0].t, told(recent, t))]
            if "bubbles" in force:
                said.insert(0, force.end("bubbles", t, t, "they jump too far: a loose lead"))
            return said
        if "bubbles" in force:
            return []
        least = LEAST_UPS
        if not level.locked or "hum" in force:
            least = LEAST_UPS_MIXING
        elif level.after_dose(t):
            least = LEAST_UPS_DOSE
        if not is_bubbling(recent, least) or not self.one_sided(int(t), level) or hum.tonal():
            return []
        first = next(jump for jump in recent if jump.height > 0)
        return [force.begin("bubbles", t, first.t, told(recent, t))]

    def _ended(self, t: float, force: InForce) -> list[Finding]:
        """No jump for several times their usual interval: they are over."""
        if self.last:
            self.end_t = self.last[-1].end_t
        elif self.end_t is None:  # begun in the run before
            self.end_t = t - 1.0
        if t - self.end_t < clear_after_s(list(self.last)[-20:]):
            return []
        end_t, self.end_t = self.end_t, None
        self.last.clear()
        names = [name for name in ("bubbles", "loose-lead") if name in force]
        return [force.end(name, t, end_t) for name in names]

    def take(self, judged: Judged, least: float) -> None:
        """Find the jumps in a second's readings; `least` is the height of a full one."""
        off = judged.ln_us - judged.m
        up, down = _beyond(off, INNER * judged.gate)
        if up or down:
            self._edges.append((judged.k, up, down))
        if judged.drifting:
            self._open = None
            return
        if self._open is None and not (abs(off) > judged.gate).any():
            return
        for t, height in zip(judged.time_s.tolist(), off.tolist()):
            self._reading(t, height, judged.gate, least)

    def _reading(self, t: float, height: float, gate: float, least: float) -> None:
        run = self._open
        if run is not None and (abs(height) <= INNER * gate or (height > 0) is not (run[2] > 0)):
            self._close(run, t, least)
            run = self._open = None
        if abs(height) > gate:
            if run is None:
                self._open = [t, t, height]
            else:
                run[1] = t
                run[2] = max(run[2], height, key=abs)

    def _close(self, run: list[float], t: float, least: float) -> None:
        start, _, height = run
        if t - start > WIDEST_S:
            return
        weight = 1.5 if abs(height) > TALL * least else 1.0 if abs(height) > least else 0.5
        last = self.last[-1] if self.last else None
        if last is not None and start - last.end_t < JOIN_S and (last.height > 0) is (height > 0):
            height = max(last.height, height, key=abs)
            self.last[-1] = Jump(last.t, t, height, max(last.weight, weight))
        else:
            self.last.append(Jump(start, t, height, weight))

    def recent(self, t: float) -> list[Jump]:
        """Jumps of the last minute."""
        return [jump for jump in self.last if jump.end_t > t - WINDOW_S]

    def one_sided(self, k: int, level: Level) -> bool:
        """Not the two-sided scatter of an oscillation: few readings low, many high."""
        edges = [edge for edge in self._edges if edge[0] > k - WINDOW_S]
        for second, m, inner in level.edgy:
            if second.k > k - WINDOW_S:
                edges.append((second.k, *_beyond(np.log(second.period_us) - m, inner)))
        up, down = sum(edge[1] for edge in edges), sum(edge[2] for edge in edges)
        return down <= 1 + 0.12 * up


def _beyond(off: Floats, inner: float) -> tuple[int, int]:
    """How many readings lie above and below the inner gate."""
    return int(np.count_nonzero(off > inner)), int(np.count_nonzero(off < -inner))


def full_height(judged: Judged, level: Level) -> float:
    """From what height a jump counts in full."""
    if level.after_dose(judged.k):
        return max(1.6 * judged.gate, 0.03)
    return 1.3 * judged.gate


def is_loose(jumps: list[Jump]) -> bool:
    """Enough big jumps among those of the last minute."""
    big = sum(jump.big for jump in jumps)
    return big >= LEAST_BIG and big >= 0.3 * len(jumps)


def is_bubbling(jumps: list[Jump], least: float) -> bool:
    """Enough jumps up, hardly any down or too big, at times that are no clock's."""
    ups = [jump for jump in jumps if jump.height > 0]
    downs = len(jumps) - len(ups)
    if sum(jump.weight for jump in ups) < least or downs > 0.15 * len(ups):
        return False
    if sum(jump.big for jump in jumps) > 0.2 * len(jumps):
        return False
    return len(ups) < 5 or _scattered([jump.t for jump in ups])


def _scattered(times: list[float]) -> bool:
    """Intervals scatter as chance does (Poisson: sd = mean), not as a clock."""
    gaps = [b - a for a, b in itertools.pairwise(times)]
    mean = sum(gaps) / len(gaps)
    sd = math.sqrt(sum((gap - mean) ** 2 for gap in gaps) / len(gaps))
    return sd >= 0.35 * mean


def clear_after_s(jumps: list[Jump]) -> float:
    """How long without a jump until they are over, from how often they came."""
    if len(jumps) < 2:
        return CLEAR[1]
    mean = (jumps[-1].t - jumps[0].t) / (len(jumps) - 1)
    return min(max(CLEAR[0] * mean, CLEAR[1]), CLEAR[2])


def told(jumps: list[Jump], t: float) -> str:
    """What a person can check: how many, how high, how long."""
    ups = sum(jump.height > 0 for jump in jumps)
    heights = [100.0 * math.expm1(jump.height) for jump in jumps]
    longest = max(jump.end_t - jump.t for jump in jumps)
    span = t - jumps[0].t
    return (
        f"{ups} jumps up and {len(jumps) - ups} down within {span:.0f} s,"
        f" {min(heights):+.1f} to {max(heights):+.1f} % of the period, longest {longest:.1f} s"
    )

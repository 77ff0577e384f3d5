"""Trends: a steady change of the salinity over half an hour and more, its doubt, its likely causes.

Rules:
- Looked at every 5 min on the minutes that the slow part takes up (none within 15 min of a dose).
- Said from 30 min on when the change is at least 0.2 % of the reading, straight, and its u95 is
  below 0.4 of the rate; again hourly and when it moved by more than its u95, at most every 15 min.
- Closed when the last 50 min surely move at less than 0.3 of it, or against it.
- One probe cannot tell water from a film on its electrodes: what fits is listed, likeliest first.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any, Protocol

import numpy as np

from monitor.blocks import Second
from monitor.dosing.ledger import Change
from monitor.findings import Finding
from monitor.trust.minutes import Line, Minutes, fit
from monitor.trust.slow import Creep

EVERY_S = 300
LEAST_MIN = 30
WINDOWS = (400, 200, 100, 60)
LEAST = 0.002  # of the reading
SURE = 0.4  # u95 against rate; below the half that is asked for, since it is a guess itself
AGAIN_S, SOONEST_S = 3600, 900
SDS, OF_RATE = 2.7, 0.025  # u95 = root of (SDS u)^2 + (OF_RATE rate)^2
GONE_MIN, GONE = 50, 0.3
STEADY = 0.3  # share of an unknown temperature's doubt by which it may change within a stretch
SAME_RMS, SAME_U = 1.6, 4.0  # a longer window must look like the last hour


class Trust(Protocol):
    """What is asked of the probe's judge."""

    creep: Creep


class Trends:
    """The trend of one probe's salinity."""

    def __init__(self, probe: str, tank: str, carried: Mapping[str, Any] | None = None) -> None:
        self.probe, self.tank = probe, tank
        self.said: Finding | None = dict(carried["said"]) if carried else None

    def step(self, second: Second, changes: Sequence[Change], trust: Trust) -> list[Finding]:
        """One closed second: a trend begun, moved, said again or ended."""
        if second.k % EVERY_S != EVERY_S - 1:
            return []
        minutes = trust.creep.minutes
        said = self.said
        if said is not None and said["pct_per_h"] < 0 and trust.creep.over_t > said["t"]:
            return [self._close(second.t)]
        if len(minutes) < LEAST_MIN or minutes.column(0, 1)[0] < second.t:
            return []
        if self.said is None and not _moves(minutes):
            return []
        return self._look(second.t, minutes, trust)

    def carry(self) -> dict[str, Any]:
        """The trend in force."""
        return {} if self.said is None else {"said": self.said}

    def _look(self, t: float, minutes: Minutes, trust: Trust) -> list[Finding]:
        line, n = _best(minutes, trust)
        if line is None:
            return []
        level = float(minutes.column(3, 1)[0])
        unseen = 0.0
        if line.by_temp != line.by_temp:
            unseen = STEADY * trust.creep.unseen * level / line.span_h
        u95 = math.hypot(SDS * math.hypot(line.u, unseen), OF_RATE * line.slope)
        if self.said is not None and self._ended(minutes):
            return [self._close(t)]
        if not (abs(line.rise) >= LEAST * level and u95 < SURE * abs(line.slope)):
            return []
        if self.said is None:
            if not trust.creep.straight(line):
                return []
            return [self._say(t, float(minutes.column(0, n)[0]) - 60.0, line, u95, trust)]
        waited = t - self.said["t"]
        moved = abs(line.slope - self.said["pct_per_h"]) > u95
        if waited >= AGAIN_S or (moved and waited >= SOONEST_S):
            return [self._say(t, self.said["from_t"], line, u95, trust)]
        return []

    def _say(self, t: float, from_t: float, line: Line, u95: float, trust: Trust) -> Finding:
        self.said = {
            "finding": "trend",
            "probe": self.probe,
            "tank": self.tank,
            "t": t,
            "from_t": from_t,
            "to_t": None,
            "pct_per_h": line.slope,
            "u95_pct_per_h": u95,
            "likely": _likely(line, trust),
        }
        return dict(self.said)

    def _ended(self, minutes: Minutes) -> bool:
        """Have the last 50 min surely lost the trend?"""
        assert self.said is not None
        n = min(GONE_MIN, len(minutes))
        if n < LEAST_MIN or minutes.column(0, n)[0] < self.said["from_t"]:
            return False
        line = _line(minutes, n)
        rate = self.said["pct_per_h"]
        along = line.slope if rate > 0 else -line.slope
        return bool(along + 2.0 * line.u < GONE * abs(rate))

    def _close(self, t: float) -> Finding:
        assert self.said is not None
        closed = {**self.said, "t": t, "to_t": t}
        self.said = None
        return closed


def _moves(minutes: Minutes) -> bool:
    """A cheap look before any line is drawn: half of the least change in any window."""
    n = len(minutes)
    windows = [wide for wide in WINDOWS if wide < n] + [min(n, WINDOWS[0])]
    return any(abs(minutes.moved(wide)) > 0.5 * LEAST for wide in windows)


def _line(minutes: Minutes, n: int) -> Line:
    salinity = minutes.column(3, n)
    return fit(
        minutes.column(0, n),
        salinity,
        minutes.column(2, n),
        minutes.column(4, n),
        float(salinity.mean()),
    )


def _best(minutes: Minutes, trust: Trust) -> tuple[Line | None, int]:
    """The longest stretch that looks like the last hour; no longer than a fouling in force."""
    n = len(minutes)
    fouling = trust.creep.fault
    if fouling is not None:
        since = int(np.sum(minutes.column(0, n) > fouling["from_t"]))
        n = max(min(n, since), LEAST_MIN)
    unknown = np.flatnonzero(np.isnan(minutes.column(3, n)))
    if len(unknown):
        n -= int(unknown[-1]) + 1
    if n < LEAST_MIN:
        return None, 0
    hour_n = min(60, n)
    hour = _line(minutes, hour_n)
    for wide in [n, *(wide for wide in WINDOWS if 60 < wide < n)]:
        line = _line(minutes, wide)
        apart = abs(line.slope - hour.slope)
        if line.rms < SAME_RMS * hour.rms and apart < SAME_U * math.hypot(line.u, hour.u):
            return line, wide
    return hour, hour_n


def _likely(line: Line, trust: Trust) -> list[str]:
    """Causes that fit the sign, likeliest first."""
    if line.slope > 0:
        causes = ["evaporation", "leak-in"]
    elif trust.creep.cause == "water":
        causes = ["leak-in", "top-up"]
    elif trust.creep.cause == "fouling":
        causes = ["fouling", "wear"]
    elif trust.creep.fault is not None:
        causes = ["fouling", "leak-in", "top-up", "wear"]
    else:
        causes = ["top-up", "leak-in", "fouling", "wear"]
    if not line.by_temp <= 0.25 * abs(line.rise):
        causes.append("temperature")
    return causes

"""Limits: outside the band that is aimed at, or changing faster than is allowed.

Rules:
- `high` and `low` begin after 10 s beyond the bound and end after 60 s back inside by the doubt of
  the reading (at least 2 and at most 25 % of the band).
- `fast` is judged every half minute on the last five minutes: the change from the first minute to
  the last must beat the bound by twice its noise to begin, and fall below 0.8 of it to end. A slope
  through all of them would be blind to a step, the fastest change of all.
- Nothing begins, and nothing ends, while the probe is out or not believed. A doubtful probe's
  findings are marked.
- While a recorded dose settles, what it was expected to do (up: `high`, rising; down: `low`,
  falling) begins nothing.
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise
from typing import Any, Protocol

from monitor import bench
from monitor.blocks import NAN, Second
from monitor.findings import Finding
from monitor.trust.measures import mad_sd

BEGIN_S, END_S = 10, 60
OF_BAND = (0.02, 0.25)
SMOOTH = 0.3  # share of a second in the salinity that is held against the band
HALF_S = 30
HALVES = 10  # half minutes looked at
LEAST_SECONDS = 3  # with a salinity, of a half minute
SLOWER = 0.8


class Trust(Protocol):
    """What is asked of the probe's judge."""

    usable: bool
    out: bool

    @property
    def belief(self) -> str: ...


class Settling(Protocol):
    """What is asked of the rest's judge."""

    @property
    def heading(self) -> float: ...


class Limits:
    """The limits of one tank, watched through one probe."""

    def __init__(
        self,
        probe: str,
        tank: str,
        settings: bench.Tank,
        carried: Mapping[str, Any] | None = None,
    ) -> None:
        self.probe, self.tank = probe, tank
        self.said: dict[str, Finding] = {}  # in force, by which
        self._idle = settings.aim_pct is None and settings.fastest_pct_per_h is None
        self._low, self._high = settings.aim_pct or (-1.0, 1e9)
        self._margins = tuple(share * (self._high - self._low) for share in OF_BAND)
        self._fastest = settings.fastest_pct_per_h
        self._smooth = NAN
        self._beyond = 0  # seconds on end
        self._inside = {"high": 0, "low": 0}
        self._halves: list[tuple[float, float, float]] = []  # time, salinity, heading
        self._sum, self._n, self._heading = 0.0, 0, 0.0  # of this half minute
        for finding in (carried or {}).get("said", ()):
            self.said[finding["which"]] = dict(finding)

    def step(
        self, second: Second, u95_pct: float, trust: Trust, settling: Settling
    ) -> list[Finding]:
        """One closed second: limits passed, and kept again."""
        if self._idle:
            return []
        if not trust.usable:
            if trust.out or trust.belief == "not-believed":
                self._quiet()
            return []
        salinity = second.salinity_pct
        if salinity != salinity:
            return []
        smooth = self._smooth
        self._smooth = smooth = (
            salinity if smooth != smooth else smooth + SMOOTH * (salinity - smooth)
        )
        found: list[Finding] = []
        if self.said or not self._low <= smooth <= self._high:
            found = self._aim(second.t, u95_pct, trust, settling.heading)
        else:
            self._beyond = 0
        if self._fastest is not None:
            self._sum += salinity
            self._n += 1
            if settling.heading:
                self._heading = settling.heading
            if second.k % HALF_S == HALF_S - 1:
                found += self._speed(second.t, self._fastest, trust)
        return found

    def carry(self) -> dict[str, Any]:
        """The limits in force."""
        return {"said": list(self.said.values())}

    def _quiet(self) -> None:
        """What a bad or lifted probe reads counts for nothing, before and after."""
        self._smooth = NAN
        self._beyond = 0
        self._inside = {"high": 0, "low": 0}
        self._halves.clear()
        self._begin_half()

    def _begin_half(self) -> None:
        self._sum, self._n, self._heading = 0.0, 0, 0.0

    def _aim(self, t: float, u95_pct: float, trust: Trust, heading: float) -> list[Finding]:
        """The smoothed salinity against the band, with hysteresis."""
        found: list[Finding] = []
        for which, over, away in (
            ("high", self._smooth - self._high, 1.0),
            ("low", self._low - self._smooth, -1.0),
        ):
            if which in self.said:
                least, most = self._margins
                margin = min(max(least, u95_pct), most) if u95_pct == u95_pct else least
                self._inside[which] = self._inside[which] + 1 if over < -margin else 0
                if self._inside[which] >= END_S:
                    found.append(self._close(t, which))
            elif over > 0.0:
                self._beyond = self._beyond + 1
                if self._beyond >= BEGIN_S and heading != away:
                    bound = self._high if away > 0 else self._low
                    found.append(self._say(t, t - self._beyond, which, self._smooth, bound, trust))
        if self._low <= self._smooth <= self._high:
            self._beyond = 0
        return found

    def _speed(self, t: float, fastest: float, trust: Trust) -> list[Finding]:
        """The slope through the last half minutes against the fastest allowed."""
        if self._n >= LEAST_SECONDS:
            self._halves.append((t, self._sum / self._n, self._heading))
            del self._halves[:-HALVES]
        self._begin_half()
        if len(self._halves) < HALVES:
            return []
        halves = self._halves
        values = [half[1] for half in halves]
        change = 0.5 * (values[-1] + values[-2] - values[0] - values[1])
        apart_h = (halves[-1][0] + halves[-2][0] - halves[0][0] - halves[1][0]) / 7200.0
        rate = abs(change) / apart_h
        if "fast" in self.said:
            return [self._close(t, "fast")] if rate < SLOWER * fastest else []
        if rate <= fastest or (1.0 if change > 0 else -1.0) in [half[2] for half in halves]:
            return []
        noise = mad_sd([later - sooner for sooner, later in pairwise(values)]) / 2.0**0.5
        if abs(change) - 2.0 * noise <= fastest * apart_h:
            return []
        return [self._say(t, halves[0][0] - HALF_S, "fast", rate, fastest, trust)]

    def _say(
        self, t: float, from_t: float, which: str, value: float, bound: float, trust: Trust
    ) -> Finding:
        self.said[which] = {
            "finding": "limit",
            "probe": self.probe,
            "tank": self.tank,
            "t": t,
            "from_t": from_t,
            "to_t": None,
            "which": which,
            "value": value,
            "bound": bound,
            "doubtful": trust.belief == "doubtful",
        }
        return dict(self.said[which])

    def _close(self, t: float, which: str) -> Finding:
        self._inside[which] = 0
        return {**self.said.pop(which), "t": t, "to_t": t}

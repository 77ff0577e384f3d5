"""The second fold: what takes all the probes of a tank, a second at a time.

`Watched` is one probe's part of it, kept by its chain: the spans of time in which it gave a usable
reading, and its salinity on every full minute. `Together` joins the probes once all their logs
have closed a second: `unwatched` tanks, probes of one tank that differ, probes that were swapped.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterable, Sequence
from typing import NamedTuple

from monitor.blocks import Second
from monitor.findings import Finding, in_order
from monitor.settling import Settling
from monitor.trust.judge import Trust

UNWATCHED_S = 600.0
KEPT_S = 1300.0  # spans that ended longer ago have been joined
MINUTES = 4000
DIFFER_MIN = 10  # minutes on end in which two probes differ beyond their doubt, or agree again
DIFFER = 1.3  # times the doubt of the difference
MOVED = 2.0  # times as far as the other: it is the one that changed
SAME_LN = 0.02  # a swapped probe reads so near to what the other read before
LOST = {  # why a link was lost, in words
    "asleep": "the machine slept",
    "stalled": "the program stood still",
    "disk": "nothing could be written",
    "moved": "its port was changed",
}
_NEAR_S = 10.0  # spans that lie nearer together are one: only long gaps are asked for


class Watched:
    """Spans [from t, to t] in which one probe was watched, and why each ended."""

    def __init__(self) -> None:
        self.spans: list[list[float]] = []
        self.why: dict[float, str] = {}  # end of a span -> what kept the probe from being usable
        self.minutes: deque[tuple[float, float, float]] = deque(maxlen=MINUTES)  # t, %, u95
        self._lost = ""  # why the link is lost, while it is

    @property
    def last_t(self) -> float | None:
        """End of the last usable second (of the start, before there was one)."""
        return self.spans[-1][1] if self.spans else None

    def begin(self, usable_t: float | None) -> None:
        """The run before was last usable at `usable_t` (of this run's time, so negative)."""
        if usable_t is not None:
            self.spans = [[usable_t, usable_t]]

    def step(self, second: Second, trust: Trust, settling: Settling) -> None:
        """Take one judged second."""
        t = second.t
        for event in second.events:
            if event.kind == "gap":
                lost = event.fields["link"] == "lost"
                self._lost = str(event.fields.get("why") or "no link")[:40] if lost else ""
        if second.k % 60 == 59 and trust.usable and not settling.moving:
            self.minutes.append((t, settling.shown_pct, settling.u95_pct))
        spans = self.spans
        if not spans:
            spans.append([t - 1.0, t - 1.0])
        if trust.usable:
            if t - spans[-1][1] <= _NEAR_S:
                spans[-1][1] = t
            else:
                spans.append([t, t])
        elif t - spans[-1][1] == UNWATCHED_S:
            self.why[spans[-1][1]] = self._reason(trust)

    def _reason(self, trust: Trust) -> str:
        if trust.out:
            return "out of the tank"
        if self._lost:
            return LOST.get(self._lost, self._lost)
        return "no readings" if trust.belief == "believed" else trust.why

    def why_after(self, t: float) -> str | None:
        """What kept the probe from being usable at the end of its last span up to `t`."""
        ends = [last for _, last in self.spans if last <= t]
        return self.why.get(ends[-1]) if ends else None

    def forget(self, before_t: float) -> None:
        """Drop what ended before `before_t`, but for the last span."""
        while len(self.spans) > 1 and self.spans[0][1] < before_t:
            self.why.pop(self.spans.pop(0)[1], None)
        while self.minutes and self.minutes[0][0] < before_t:
            self.minutes.popleft()


class Unwatched:
    """One tank: said when none of its probes was usable for ten minutes."""

    def __init__(self, tank: str) -> None:
        self.tank = tank
        self.last_t: float | None = None
        self.said: Finding | None = None

    def advance(self, upto_t: float, probes: Iterable[tuple[str, Watched, float]]) -> list[Finding]:
        """Findings up to `upto_t`, which all the probes' logs have closed.

        `probes` : name, spans, and what to add to their times, of each probe in the tank.
        """
        probes = list(probes)
        found: list[Finding] = []
        spans = [(a + by, b + by) for _, watched, by in probes for a, b in watched.spans]
        for first, last in sorted(spans):
            if first > upto_t:
                break
            if self.last_t is not None and first - self.last_t > _NEAR_S:
                found += self._due(first, probes)
                if self.said is not None:
                    found.append({**self.said, "t": first, "to_t": first})
                    self.said = None
            last = min(last, upto_t)
            self.last_t = last if self.last_t is None else max(self.last_t, last)
        return found + self._due(upto_t, probes)

    def _due(self, t: float, probes: list[tuple[str, Watched, float]]) -> list[Finding]:
        if self.said is not None or self.last_t is None or t - self.last_t < UNWATCHED_S:
            return []
        said = ((name, watched.why_after(self.last_t - by)) for name, watched, by in probes)
        whys = [f"{name} ({why})" for name, why in said if why]
        self.said = {
            "finding": "unwatched",
            "tank": self.tank,
            "t": self.last_t + UNWATCHED_S,
            "from_t": self.last_t,
            "to_t": None,
            "why": "no usable reading for 10 min: " + ("; ".join(whys) or "silent"),
        }
        return [dict(self.said)]


class Differ:
    """Two probes in one tank: said when they differ beyond their doubt for ten minutes."""

    def __init__(self, tank: str, names: tuple[str, str]) -> None:
        self.tank = tank
        self.names = names
        self.said: Finding | None = None
        self._done_t = -math.inf
        self._row = 0  # minutes on end that speak for a change of what is said
        self._agreed: tuple[float, float] | None = None

    def advance(
        self, upto_t: float, minutes: Sequence[dict[float, tuple[float, float]]]
    ) -> list[Finding]:
        """Findings up to `upto_t`; `minutes`: t to (%, u95) of each of the two."""
        found: list[Finding] = []
        shared = sorted(minutes[0].keys() & minutes[1].keys())
        for t in shared:
            if self._done_t < t <= upto_t:
                self._done_t = t
                found += self._minute(t, minutes[0][t], minutes[1][t])
        return found

    def _minute(
        self, t: float, one: tuple[float, float], other: tuple[float, float]
    ) -> list[Finding]:
        away = one[0] - other[0]
        doubt = math.hypot(one[1], other[1])
        if not (math.isfinite(away) and math.isfinite(doubt)):
            return []
        differ = abs(away) > DIFFER * doubt
        if not differ:
            self._agreed = (one[0], other[0])
        self._row = self._row + 1 if differ is (self.said is None) else 0
        if self._row < DIFFER_MIN:
            return []
        self._row = 0
        if self.said is not None:
            said, self.said = self.said, None
            return [{**said, "t": t, "to_t": t}]
        self.said = {
            "finding": "notice",
            "probe": None,
            "tank": self.tank,
            "t": t,
            "from_t": t - 60.0 * DIFFER_MIN,
            "to_t": None,
            "what": "probes-differ",
            "value": away,
            "text": self._text(one, other, doubt),
        }
        return [dict(self.said)]

    def _text(self, one: tuple[float, float], other: tuple[float, float], doubt: float) -> str:
        text = (
            f"{self.names[0]} reads {one[0]:.4f} %, {self.names[1]} {other[0]:.4f} %, beyond"
            f" their doubt of {doubt:.4f} %"
        )
        if self._agreed is None:
            return f"{text}: read a check standard with both"
        moves = [abs(one[0] - self._agreed[0]), abs(other[0] - self._agreed[1])]
        if max(moves) < MOVED * min(moves):
            return f"{text}; both have moved: read a check standard with both"
        return f"{text}; {self.names[moves.index(max(moves))]} is the one that changed"


class Swaps:
    """Two probes that each read as the other did before a gap: their plugs were exchanged."""

    def __init__(self) -> None:
        self._asked: dict[str, Finding] = {}  # other-probe in force, by probe
        self._said: dict[tuple[str, str], Finding] = {}

    def take(self, finding: Finding) -> list[Finding]:
        """One finding, in order of time."""
        if finding.get("what") != "other-probe":
            return []
        probe = finding["probe"]
        if finding["to_t"] is not None:
            self._asked.pop(probe, None)
            pairs = [pair for pair in self._said if probe in pair]
            t = finding["t"]
            return [{**self._said.pop(pair), "t": t, "to_t": t} for pair in pairs]
        self._asked[probe] = finding
        return [
            self._say(finding, other) for other in self._asked.values() if _swapped(finding, other)
        ]

    def _say(self, finding: Finding, other: Finding) -> Finding:
        pair = (other["probe"], finding["probe"])
        said: Finding = {
            "finding": "notice",
            "probe": finding["probe"],
            "tank": finding["tank"],
            "t": finding["t"],
            "from_t": finding["from_t"],
            "to_t": None,
            "what": "probes-swapped",
            "value": 2,
            "text": f"{pair[0]} reads what {pair[1]} read before the gap, and the other way round:"
            " were their plugs exchanged? use names below /dev/serial/by-id/",
        }
        self._said[pair] = said
        return dict(said)


def _swapped(one: Finding, other: Finding) -> bool:
    if one["probe"] == other["probe"]:
        return False
    near = [
        math.log(one["after_us"] / other["before_us"]),
        math.log(other["after_us"] / one["before_us"]),
    ]
    return max(map(abs, near)) < SAME_LN


class Seen(NamedTuple):
    """One probe as the fold over all sees it, on the common time."""

    probe: str
    tank: str
    closed_t: float
    runs: Sequence[tuple[Watched, float]]  # of each of its runs, what to add to its times
    done: bool = False


class Together:
    """The fold over all probes: their findings in order of time, and what takes two of them."""

    def __init__(self) -> None:
        self._tanks: dict[str, Unwatched] = {}
        self._pairs: dict[tuple[str, str, str], Differ] = {}
        self._swaps = Swaps()
        self._waiting: list[Finding] = []

    def take(self, found: Iterable[Finding]) -> None:
        """Findings of one probe, in its order."""
        self._waiting += found

    def advance(self, probes: Sequence[Seen]) -> tuple[list[Finding], list[Finding]]:
        """All findings that are sure now, in order; and which of them are of this fold."""
        mine: list[Finding] = []
        for tank in dict.fromkeys(seen.tank for seen in probes):
            mine += self._tank(tank, [seen for seen in probes if seen.tank == tank])
        sure_t = min((seen.closed_t for seen in probes if not seen.done), default=math.inf)
        self._waiting = in_order([*self._waiting, *mine])
        ready = [finding for finding in self._waiting if finding["t"] <= sure_t]
        self._waiting = self._waiting[len(ready) :]
        swapped = [said for finding in ready for said in self._swaps.take(finding)]
        told = in_order([*ready, *swapped]) if swapped else ready
        return told, [f for f in told if _of_fold(f)]

    def _tank(self, tank: str, its: Sequence[Seen]) -> list[Finding]:
        upto_t = min(seen.closed_t for seen in its)
        spans = [(seen.probe, watched, by) for seen in its for watched, by in seen.runs]
        found = self._tanks.setdefault(tank, Unwatched(tank)).advance(upto_t, spans)
        for i, one in enumerate(its):
            for other in its[i + 1 :]:
                names = (one.probe, other.probe)
                fold = self._pairs.setdefault((tank, *names), Differ(tank, names))
                found += fold.advance(upto_t, [_minutes(one), _minutes(other)])
        for _, watched, by in spans:
            watched.forget(upto_t - by - KEPT_S)
        return found


def _minutes(seen: Seen) -> dict[float, tuple[float, float]]:
    return {t + by: (pct, u95) for watched, by in seen.runs for t, pct, u95 in watched.minutes}


def _of_fold(finding: Finding) -> bool:
    return finding["finding"] == "unwatched" or finding.get("what") in (
        "probes-differ",
        "probes-swapped",
    )

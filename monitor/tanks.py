"""The second fold: what takes all the probes of a tank, a second at a time.

`Watched` is one probe's part of it, kept by its chain: the spans of time in which it gave a usable
reading. `Unwatched` joins the spans of a tank's probes once all their logs have closed a second.
"""

from __future__ import annotations

from collections.abc import Iterable

from monitor.blocks import Second
from monitor.findings import Finding
from monitor.trust.judge import Trust

UNWATCHED_S = 600.0
_NEAR_S = 10.0  # spans that lie nearer together are one: only long gaps are asked for


class Watched:
    """Spans [from t, to t] in which one probe was watched, and why each ended."""

    def __init__(self) -> None:
        self.spans: list[list[float]] = []
        self.why: dict[float, str] = {}  # end of a span -> what kept the probe from being usable

    @property
    def last_t(self) -> float | None:
        """End of the last usable second (of the start, before there was one)."""
        return self.spans[-1][1] if self.spans else None

    def begin(self, usable_t: float | None) -> None:
        """The run before was last usable at `usable_t` (of this run's time, so negative)."""
        if usable_t is not None:
            self.spans = [[usable_t, usable_t]]

    def step(self, second: Second, trust: Trust) -> None:
        """Take one judged second."""
        t = second.t
        spans = self.spans
        if not spans:
            spans.append([t - 1.0, t - 1.0])
        if trust.usable:
            if t - spans[-1][1] <= _NEAR_S:
                spans[-1][1] = t
            else:
                spans.append([t, t])
        elif t - spans[-1][1] == UNWATCHED_S:
            self.why[spans[-1][1]] = "out of the tank" if trust.out else trust.why or "silent"

    def why_after(self, t: float) -> str | None:
        """What kept the probe from being usable at the end of its last span up to `t`."""
        ends = [last for _, last in self.spans if last <= t]
        return self.why.get(ends[-1]) if ends else None

    def forget(self, before_t: float) -> None:
        """Drop the spans that ended before `before_t`, but for the last."""
        while len(self.spans) > 1 and self.spans[0][1] < before_t:
            self.why.pop(self.spans.pop(0)[1], None)


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
        whys = [f"{name} {why}" for name, why in said if why]
        self.said = {
            "finding": "unwatched",
            "tank": self.tank,
            "t": self.last_t + UNWATCHED_S,
            "from_t": self.last_t,
            "to_t": None,
            "why": "no usable reading for 10 min: " + ("; ".join(whys) or "silent"),
        }
        return [dict(self.said)]

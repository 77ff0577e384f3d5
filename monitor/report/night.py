"""A stretch of time of one bench, gathered from its logs through the very chain that judged it."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any, NamedTuple, Protocol

from monitor.bench import Bench
from monitor.blocks import NAN, Event, Second
from monitor.chain import Judges
from monitor.dosing.ledger import Dose
from monitor.findings import Finding
from monitor.logbook.codec import utc_of
from monitor.many import JudgedProbe, Keeper, judge_logs
from monitor.replay import replay

TOLD = (
    *("dose", "strike", "water", "out", "back", "note", "check", "compare", "silence", "gap"),
    "answer",
)
LASTING = ("fault", "trend", "limit", "unwatched", "notice")  # said again when they end
SETTINGS = ("bench", "calibration")  # stand at the head of each part: told where they differ


class Minute(NamedTuple):
    """One minute of one probe. Salinities in %, NaN where no reading was usable."""

    t: float  # its end, s since the first `started`
    mean_pct: float
    low_pct: float
    high_pct: float
    u95_pct: float
    temp_c: float
    readings: int
    belief: str


@dataclass
class Lane:
    """What one probe has to tell of the night."""

    probe: str
    tank: str = ""
    label: str = ""
    aim_pct: tuple[float, float] | None = None
    minutes: list[Minute] = field(default_factory=list)
    events: list[Event] = field(default_factory=list)
    doses: dict[float, Dose] = field(default_factory=dict)  # by the night's time
    settings: dict[str, Mapping[str, Any]] = field(default_factory=dict)  # the newest, by kind
    dropped: dict[str, int] = field(default_factory=dict)
    messages: list[str] = field(default_factory=list)


@dataclass
class Night:
    """Everything the report is made of."""

    started: datetime  # where times are counted from
    from_t: float
    to_t: float
    lanes: list[Lane]
    findings: list[Finding]

    def when(self, t: float) -> datetime:
        """Local time of a time of the night, with its offset."""
        return (self.started + timedelta(seconds=t)).astimezone()


class _Minutes:
    """Sums the seconds of one run into minutes as they are judged."""

    def __init__(self, probe: str) -> None:
        self.lane = Lane(probe)
        self.offset = 0.0
        self._minute: int | None = None
        self._values: list[float] = []
        self._readings = 0
        self._temp = self._u95 = NAN
        self._belief = ""

    def __call__(self, probe: str, offset: float, second: Second, judges: Judges) -> None:
        """One judged second."""
        self.offset = offset
        if self._minute != second.k // 60:
            self.close()
            self._minute = second.k // 60
            settings = judges.bench.probe[self.lane.probe]
            self.lane.tank = settings.tank
            self.lane.label = judges.bench.tank[settings.tank].label
            self.lane.aim_pct = judges.bench.tank[settings.tank].aim_pct
        self._readings += second.n_rows
        if judges.trust.usable and not math.isnan(second.salinity_pct):
            self._values.append(second.salinity_pct)
        self._temp = second.temp_used_c
        self._u95 = judges.settling.u95_pct
        self._belief = "out" if judges.trust.out else judges.trust.belief
        for event in second.events:
            if event.kind == "dose":
                self._book(event.time_s, judges)
            if event.kind in SETTINGS:
                event = self._changed(event)
            if event.kind in TOLD or (event.kind in SETTINGS and event.fields["changed"]):
                self.lane.events.append(event._replace(time_s=event.time_s + self.offset))

    def _changed(self, event: Event) -> Event:
        """The settings' event with what differs from those before."""
        before = self.lane.settings.get(event.kind)
        self.lane.settings[event.kind] = event.fields
        differs = list(_differing(before, event.fields)) if before is not None else []
        return event._replace(fields={"name": event.fields.get("name"), "changed": differs})

    def _book(self, time_s: float, judges: Judges) -> None:
        """Keep the dose as it was reckoned with."""
        for dose in judges.ledger.doses:
            if dose.time_s == time_s:
                self.lane.doses[time_s + self.offset] = dose

    def close(self) -> None:
        """The minute is over."""
        if self._minute is None:
            return
        values = self._values
        mean, low, high = (
            (sum(values) / len(values), min(values), max(values)) if values else (NAN, NAN, NAN)
        )
        t = 60.0 * (self._minute + 1) + self.offset
        self.lane.minutes.append(
            Minute(t, mean, low, high, self._u95, self._temp, self._readings, self._belief)
        )
        self._values, self._readings = [], 0


class Judge(Protocol):
    """How many logs are judged: `many.judge_logs`, or that with more said to it."""

    def __call__(
        self, paths: Sequence[str], given: Bench | None, *, keeper: Callable[[str], Keeper]
    ) -> list[JudgedProbe]:
        """The probes of these logs, judged."""


def _differing(before: Any, after: Any, at: str = "", depth: int = 3) -> Iterator[str]:
    """Names of the keys whose values differ, down to `depth` tables."""
    if before == after:
        return
    if depth and isinstance(before, Mapping) and isinstance(after, Mapping):
        for key in {**before, **after}:
            name = f"{at}.{key}" if at else str(key)
            yield from _differing(before.get(key), after.get(key), name, depth - 1)
    else:
        yield at


def gather(
    paths: Sequence[str],
    given: Bench | None = None,
    since: datetime | None = None,
    until: datetime | None = None,
    judge: Judge = judge_logs,
) -> Night:
    """Judge these logs and keep what lies between `since` and `until`.

    Raises LogError, CalibrationError.
    """
    probes = judge(paths, given, keeper=_Minutes)
    findings = [finding for batch in replay(probes) for finding in batch]
    lanes = [_lane(probe) for probe in probes]
    zero = probes[0].zero
    first = 0.0 if since is None else (since - zero).total_seconds()
    ends = [probe.closed_t for probe in probes]
    last = max(ends) if until is None else (until - zero).total_seconds()
    night = Night(zero, max(first, 0.0), min(last, max(ends)), lanes, [])
    night.findings = list(_of(night, findings))
    for lane in night.lanes:
        lane.minutes = list(_without_lifts(lane, findings))
        lane.minutes = [m for m in lane.minutes if night.from_t < m.t <= night.to_t + 60]
        lane.events = [e for e in lane.events if _counts(e, night)]
    return night


def _lane(probe: JudgedProbe) -> Lane:
    """All runs of one probe, in order."""
    joined = Lane(probe.probe)
    for run in probe.runs:
        assert isinstance(run.kept, _Minutes)
        lane = run.kept.lane
        if lane.tank:
            joined.tank, joined.label, joined.aim_pct = lane.tank, lane.label, lane.aim_pct
        joined.minutes += lane.minutes
        joined.events += lane.events
        joined.doses |= lane.doses
    joined.dropped = dict(probe.told.dropped)
    joined.messages = probe.told.messages
    return joined


def _without_lifts(lane: Lane, findings: Sequence[Finding]) -> Iterator[Minute]:
    """The minutes, with those in which the probe turned out to have been lifted as out."""
    lifts = [
        (f["from_t"], f["to_t"])
        for f in findings
        if f.get("what") == "lift" and f["probe"] == lane.probe
    ]
    for minute in lane.minutes:
        lifted = any(minute.t > from_t and minute.t - 60.0 < to_t for from_t, to_t in lifts)
        yield _out(minute) if lifted else minute


def _out(minute: Minute) -> Minute:
    return minute._replace(mean_pct=NAN, low_pct=NAN, high_pct=NAN, u95_pct=NAN, belief="out")


def _of(night: Night, findings: Sequence[Finding]) -> Iterator[Finding]:
    """What was said in the night, and before it what lasted into it."""
    before: dict[tuple[Any, ...], Finding] = {}
    for f in findings:
        if f["t"] >= night.from_t:
            break
        if f["finding"] in LASTING:
            name = f.get("fault") or f.get("which") or f.get("what")
            key = f["finding"], f.get("probe"), f.get("tank"), name, f["from_t"]
            before.pop(key, None)
            if f["to_t"] is None:
                before[key] = f
    yield from before.values()
    yield from (f for f in findings if night.from_t <= f["t"] <= night.to_t)


def _counts(event: Event, night: Night) -> bool:
    """Whether an event belongs to the night: met in it, or a silence that is still in force."""
    if event.kind == "silence" and event.time_s < night.from_t:
        return utc_of(event.fields["until_utc"]) > night.when(night.from_t)
    return night.from_t <= event.time_s <= night.to_t

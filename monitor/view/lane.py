"""One probe in its tank, as a screen shows it: a pure fold over judged seconds and findings.

Times are seconds of the first run that is shown; a later run's are moved by `offset_s`. What the
judges hold now is read from them when it is asked for, so that a second costs next to nothing.
"""

from __future__ import annotations

import itertools
from collections import deque
from collections.abc import Mapping
from typing import Any

from monitor.bench import Bench
from monitor.blocks import NAN, Event, Second
from monitor.chain import Judges
from monitor.findings import Finding
from monitor.signal.trace import TraceFilter
from monitor.view.marks import Dosed, Note, Span
from monitor.view.present import Present
from monitor.view.traces import DOUBTFUL, NOT_TANK, TANK, Raw, Trace

MARKS_MOST = 2000
EVIDENCE_BEFORE_S = 20.0
EVIDENCE_MOST_S = 90.0
_VERSIONS = itertools.count(0, 1 << 40)  # no lane ever has a version that another had
SLOW = ("fouling",)  # a few seconds of readings show nothing of it: the trace does


class Lane(Present):
    """What one probe tells of its tank."""

    def __init__(self, probe: str, bench: Bench | None = None, mark: str = "") -> None:
        """As Present has it."""
        super().__init__(probe, bench, mark)
        self.version = next(_VERSIONS)  # changes whenever anything shown may have changed
        self.marked = 0  # changes with findings and events
        self.t = NAN  # all before this is judged
        self.trace = Trace()
        self.raw = Raw()
        self.doses: deque[Dosed] = deque(maxlen=MARKS_MOST)
        self.rests: deque[Finding] = deque(maxlen=MARKS_MOST)
        self.outlooks: deque[Finding] = deque(maxlen=2 * MARKS_MOST)
        self.spans: deque[Span] = deque(maxlen=MARKS_MOST)
        self.notes: deque[Note] = deque(maxlen=MARKS_MOST)
        self.told: deque[Finding] = deque(maxlen=MARKS_MOST)  # all but outlooks
        self.lasting: dict[tuple[str, str], Finding] = {}  # trends, limits, unwatched, notices
        self.out: Span | None = None
        self.rejected = 0
        self._trace_filter = TraceFilter(1.0, 1.0)
        self._filtered_for: Judges | None = None

    def begin_run(self, offset_s: float) -> None:
        """Another run of the probe follows; its times count from `offset_s`."""
        self.offset_s = offset_s
        self.link_lost = self.out = None
        self.lasting.clear()

    def second(self, second: Second, judges: Judges) -> None:
        """Take one judged second."""
        self.version += 1
        self._judges = judges
        self._second = second
        self.t = second.t + self.offset_s
        if second.events:
            self._meet(second, judges)
        if not second.n_rows:
            return
        self.raw.add(second, self.offset_s)
        value = second.salinity_pct if judges.calibration is not None else second.mean_us
        trust = judges.trust
        good = NOT_TANK
        if trust.usable:
            good = TANK if trust.belief == "believed" else DOUBTFUL
        filtered = self._filter(judges).step(second.k, value if good else NAN)
        self.trace.add(second, self.offset_s, value, filtered, good)

    def _filter(self, judges: Judges) -> TraceFilter:
        """The trace's filter, as the bench in force wants it."""
        if self._filtered_for is not judges:
            self._filtered_for = judges
            settings = judges.bench.probe[self.probe]
            self._trace_filter = TraceFilter(settings.median_s, settings.ewma_s)
        return self._trace_filter

    def hear(self, finding: Finding) -> None:
        """Take a finding if it is about this probe, or its tank."""
        named = finding.get("probe")
        if named == self.probe or (named is None and finding.get("tank") == self.tank):
            self.finding(finding)

    def finding(self, finding: Finding) -> None:
        """Take a finding that names this probe, or its tank; its times are the lane's."""
        self.version += 1
        self.marked += 1
        kind = finding["finding"]
        if kind == "outlook":
            self.outlooks.append(finding)
            return
        self.told.append(finding)
        if kind == "rest":
            self._rest(finding)
        elif kind == "fault":
            self._fault(finding)
        elif kind != "belief":
            key = (kind, str(finding.get("which") or finding.get("what") or ""))
            if finding.get("to_t") is None:
                self.lasting[key] = finding
            else:
                self.lasting.pop(key, None)

    def _rest(self, finding: Finding) -> None:
        said = self.rests[-1]["rested_t"] if self.rests else None
        if finding.get("to_t") is not None and said == finding["rested_t"]:
            self.rests.pop()
        self.rests.append(finding)

    def _fault(self, finding: Finding) -> None:
        name = finding["fault"]
        for span in reversed(self.spans):
            if span.what == name and span.to_t is None:
                span.to_t, span.why = finding["to_t"], finding["evidence"]
                return
        span = Span(name, finding["from_t"], finding["to_t"], finding["evidence"])
        self.spans.append(span)
        if name in SLOW:
            return
        first = max(finding["from_t"], finding["t"] - EVIDENCE_MOST_S) - EVIDENCE_BEFORE_S
        times, periods, _ = self.raw.between(first, finding["t"])
        span.raw = (times[-2000:], periods[-2000:])

    def _meet(self, second: Second, judges: Judges) -> None:
        self.marked += 1
        for dose in judges.ledger.doses:
            if dose.met_k == second.k:
                when = dose.time_s + self.offset_s
                mark = Dosed(when, dose.open_s, dose.volume_ml, dose.liquid, dose.key)
                if all(each.key != dose.key or each.time_s != when for each in self.doses):
                    self.doses.append(mark)
        for event in second.events:
            self._event(event)

    def _event(self, event: Event) -> None:
        t, fields = event.time_s + self.offset_s, event.fields
        if event.kind == "strike":
            self._strike(fields)
        elif event.kind == "note":
            self.notes.append(Note(t, str(fields.get("text", ""))))
        elif event.kind == "water":
            self.notes.append(Note(t, "water"))
        elif event.kind == "rejected":
            self.rejected += int(fields.get("n", 0))
        elif event.kind == "gap":
            lost = fields.get("link") == "lost"
            self.link_lost = self._toggled(self.link_lost, "link", lost, t, fields)
        elif event.kind in ("out", "back"):
            self.out = self._toggled(self.out, "out", event.kind == "out", t, fields)

    def _strike(self, fields: Mapping[str, Any]) -> None:
        of = str(fields.get("of"))
        for mark in reversed(self.doses):
            when = f"{mark.time_s - self.offset_s:.3f}"
            if of in (mark.key, when, when.rstrip("0").rstrip(".")):
                mark.struck = True
                return

    def _toggled(
        self, span: Span | None, what: str, begins: bool, t: float, fields: Mapping[str, Any]
    ) -> Span | None:
        if not begins:
            if span is not None:
                span.to_t = t
            return None
        if span is None:
            span = Span(what, t, None, str(fields.get("why", "")))
            self.spans.append(span)
        return span

    @property
    def last_dose(self) -> Dosed | None:
        """The newest dose that was not struck out."""
        return next((dose for dose in reversed(self.doses) if not dose.struck), None)

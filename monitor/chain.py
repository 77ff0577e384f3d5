"""The fold over one probe's log: seconds in, findings out. It reads no clock.

Rules:
- All that changes what is said comes in as rows and events: `bench`, `calibration` and `carried`
  at the head of a part, orders and passing time after it. Given a bench from outside, the log's
  own `bench` and `calibration` are passed over and the whole run is judged by that bench.
- A changed `bench` or `calibration` is a restart in place: every judge begins anew with what
  `carry` holds at that moment. One that changes nothing (the head of a further part) does nothing.
- `carried` counts once, before the first row.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from monitor.bench import Bench, BenchError, from_event
from monitor.blocks import Block, Event, Second
from monitor.calibration import Calibration, CalibrationError, fit
from monitor.dosing.ledger import Ledger
from monitor.findings import Finding, in_order
from monitor.notices import Notices
from monitor.settling import Settling
from monitor.signal.seconds import Gatherer
from monitor.tanks import Watched
from monitor.trust.judge import Trust
from monitor.trust.limits import Limits
from monitor.trust.trends import Trends

THERMOMETER_U_C = 0.1  # standard uncertainty of a thermometer's offset, where none is stated
NO_THERMOMETER_U_C = 1.0  # and of the temperature itself, where there is no thermometer


class Judges:
    """The rooms of judgement over one probe, begun together from one set of settings."""

    def __init__(
        self,
        probe: str,
        bench: Bench,
        calibration: Calibration | None,
        carried: Mapping[str, Any],
    ) -> None:
        settings = bench.probe[probe]
        tank = bench.tank[settings.tank]
        self.bench = bench
        self.calibration = calibration
        self.temp_c = settings.temp_c
        if self.temp_c is None and calibration is not None:
            self.temp_c = calibration.temp_c
        temp_u_c = settings.temp_u_c
        if temp_u_c is None:
            temp_u_c = THERMOMETER_U_C if settings.temp_c is None else NO_THERMOMETER_U_C
        self.ledger = Ledger(bench, settings.tank, carried.get("ledger"))
        self.trust = Trust(probe, settings, carried.get("trust"))
        self.settling = Settling(
            probe,
            settings.tank,
            tank,
            calibration,
            temp_u_c,
            carried.get("settling"),
            {name: liquid.salinity_pct for name, liquid in bench.liquid.items()},
            self.temp_c,
        )
        self.trends = Trends(probe, settings.tank, carried.get("trends"))
        self.limits = Limits(probe, settings.tank, tank, carried.get("limits"))
        self.notices = Notices(probe, bench, settings.tank, carried.get("notices"))

    def step(self, second: Second) -> list[Finding]:
        """What this second's closing leads to, in the order in which it is told."""
        changes = self.ledger.step(second)
        found = self.trust.step(second, changes)
        found += self.settling.step(second, changes, self.trust)
        found += self.trends.step(second, changes, self.trust)
        found += self.limits.step(second, self.settling.u95_pct, self.trust, self.settling)
        found += self.notices.step(second, changes, self.trust, self.settling, self.ledger)
        return in_order(found) if len(found) > 1 else found

    def convert(self, seconds: list[Second]) -> None:
        """Fill in the seconds' salinities."""
        if self.calibration is None or self.temp_c is None:
            return
        mean_us = np.array([second.mean_us for second in seconds])
        temp_c = np.array([second.temp_used_c for second in seconds])
        temp_c[np.isnan(temp_c)] = self.temp_c
        salinity = self.calibration.salinity_pct(mean_us, temp_c)
        for second, value in zip(seconds, salinity.tolist()):
            second.salinity_pct = value

    def carry(self) -> dict[str, Any]:
        """All that the next run needs and its own log cannot tell, JSON-able."""
        rooms = ("ledger", "trust", "settling", "trends", "limits", "notices")
        return {room: getattr(self, room).carry() for room in rooms}


Watch = Callable[[Second, Judges], None]


class Chain:
    """One probe's fold, from the items of its log."""

    def __init__(
        self,
        probe: str,
        given: Bench | None = None,
        first_second: int | None = 0,
        watch: Watch | None = None,
    ) -> None:
        """`given`: judge by this bench, not by the log's. `watch` sees each second once judged.

        Raises CalibrationError if the given bench's standards allow no fit.
        """
        self.probe = probe
        self.given = given
        self.watch = watch
        self.judges: Judges | None = None
        self.refused: list[str] = []  # settings in the log that do not check, a line each
        self.has_settings = given is not None
        self.unjudged = 0  # seconds with rows before there were settings
        self.closed_t = float("-inf")  # all before this has been judged
        self.watched = Watched()
        self._gatherer = Gatherer(first_second)
        self._carried: Mapping[str, Any] = {}
        self._head = True
        if given is not None:
            self._begin(given, calibration_of(given, probe))

    def feed(self, item: Block | Event) -> list[Finding]:
        """Findings that this item of the log leads to."""
        if isinstance(item, Block):
            self._head = False
        elif item.kind == "bench":
            self.has_settings = True
        elif item.kind == "carried" and self._head:
            self._take(item.fields)
        seconds = self._gatherer.feed(item)
        if not seconds:
            return []
        found = self._judge(seconds[:1])
        return found + self._judge(seconds[1:]) if len(seconds) > 1 else found

    @property
    def dropped(self) -> int:
        """Rows of seconds that an event had already closed."""
        return self._gatherer.dropped

    def carry(self) -> dict[str, Any]:
        """What a run that follows must be told."""
        if self.judges is None:
            return dict(self._carried)
        return {**self.judges.carry(), "usable_t": self.watched.last_t}

    def _take(self, carried: Mapping[str, Any]) -> None:
        self._head = False
        self._carried = carried
        self.watched.begin(carried.get("usable_t"))
        if self.judges is not None:
            self._begin(self.judges.bench, self.judges.calibration)

    def _begin(self, bench: Bench, calibration: Calibration | None) -> None:
        carried = self.carry() if not self._carried else self._carried
        self._carried = {}
        try:
            self.judges = Judges(self.probe, bench, calibration, carried)
        except (KeyError, TypeError, ValueError, AttributeError) as wrong:
            if not carried:
                raise
            self.refused.append(f"carried event not taken, begun without it: {wrong!r}")
            self.judges = Judges(self.probe, bench, calibration, {})

    def _judge(self, seconds: list[Second]) -> list[Finding]:
        found: list[Finding] = []
        if seconds and seconds[0].events and self.given is None:
            self._settings(seconds[0].events)
        judges = self.judges
        self.closed_t = seconds[-1].t
        if judges is None:
            self.unjudged += sum(1 for second in seconds if second.n_rows)
            return found
        judges.convert(seconds)
        watch, watched = self.watch, self.watched
        for second in seconds:
            found += judges.step(second)
            watched.step(second, judges.trust, judges.settling)
            if watch is not None:
                watch(second, judges)
        return found

    def _settings(self, events: tuple[Event, ...]) -> None:
        """Take the settings that stand in the log; begin anew if they changed."""
        bench = self.judges.bench if self.judges else None
        calibration = self.judges.calibration if self.judges else None
        was = (bench, calibration and calibration.as_event())
        for event in events:
            try:
                if event.kind == "bench":
                    new = from_event(event.fields)
                    if self.probe not in new.probe:
                        raise BenchError("bench event", "probe", "another probe's", self.probe)
                    if new != bench:
                        bench, calibration = new, calibration_of(new, self.probe)
                elif event.kind == "calibration":
                    calibration = Calibration.from_event(event.fields)
            except (BenchError, CalibrationError, KeyError, TypeError, ValueError) as wrong:
                self.refused.append(f"{event.kind} event at {event.time_s:.3f} s: {wrong}")
        if bench is not None and was != (bench, calibration and calibration.as_event()):
            self._begin(bench, calibration)


def calibration_of(bench: Bench, probe: str) -> Calibration | None:
    """The calibration that the probe's standards in force give; None without standards.

    Raises CalibrationError (one line) if they allow no fit.
    """
    settings = bench.probe[probe]
    standards = settings.standards_in_force
    if not standards:
        return None
    return fit(standards, settings.medium, settings.tick_us)

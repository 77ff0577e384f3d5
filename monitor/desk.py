"""Where orders are carried out: each becomes an event in the logs that it concerns.

An order is answered with ok once it is in the log of every probe that it concerns. One that could
be written to some of them only is refused and may be given again: its id acts once in each.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Protocol

from monitor.bells import Bells
from monitor.bench import Bench
from monitor.calibration import CalibrationError, fit
from monitor.clock import Clock
from monitor.control import Answer
from monitor.logbook.codec import utc_of
from monitor.orders import Order, OrderError, parse
from monitor.recorder import Recorder

SILENCE_MOST_S = 86_400.0


class Service(Protocol):
    """What orders act on."""

    bench: Bench
    clock: Clock
    bells: Bells
    recorders: dict[str, Recorder]

    def reload(self) -> str: ...

    def silence(self, what: str, until_utc: str) -> None: ...


def carry_out(service: Service, message: dict[str, Any]) -> Answer:
    """Carry out one order; the answer."""
    if message.get("order") == "status":
        return {"ok": True, "probes": {name: _status(service, name) for name in service.recorders}}
    if message.get("order") == "reload":
        why = service.reload()
        return {"ok": False, "why": f"bench file not taken: {why}"} if why else {"ok": True}
    try:
        order = parse(message, service.bench)
        _check(service, order)
        for probe in order.probes:
            if not _write(service, probe, order):
                raise OrderError("nothing can be written to the log now; order not taken")
    except (OrderError, CalibrationError) as wrong:
        return {"ok": False, "why": str(wrong)}
    if order.kind == "silence":
        service.silence(str(order.fields["what"]), str(order.fields["until_utc"]))
    return {"ok": True, "time_s": service.recorders[order.probes[0]].run_s - order.ago_s}


def _check(service: Service, order: Order) -> None:
    """Hold the order against what goes on now. Raises OrderError."""
    for probe in order.probes:
        if probe not in service.recorders:
            raise OrderError(f"probe {probe} is not recorded now; order not taken")
        if service.recorders[probe].paused:
            raise OrderError("nothing can be written to the log now; order not taken")
    if order.kind == "silence":  # nothing is silenced without a limit in time
        until_utc = str(order.fields["until_utc"])
        left_s = (utc_of(until_utc) - service.clock.utc()).total_seconds()
        if not 0.0 < left_s <= SILENCE_MOST_S:
            raise OrderError(f"until_utc: {until_utc}; expected a time within the next 24 h")


def _write(service: Service, probe: str, order: Order) -> bool:
    recorder = service.recorders[probe]
    fields = order.fields
    if order.kind == "calibration":
        fields = _chosen(service, probe, fields.get("set"))
    when = None if order.ago_s == 0 else recorder.run_s - order.ago_s
    return recorder.event(order.kind, fields, when)


def _chosen(service: Service, probe: str, named: Any) -> Mapping[str, Any]:
    """The calibration that a set of standards gives. Raises OrderError, CalibrationError."""
    settings = service.bench.probe[probe]
    standards = [each for each in settings.standard if each.set == named]
    if not standards:
        sets = ", ".join(sorted({each.set or "unnamed" for each in settings.standard})) or "none"
        said = str(named)[:64]
        raise OrderError(f"set {said!a} is not in the bench file; expected one of {sets}")
    return fit(standards, settings.medium, settings.tick_us).as_event()


def _status(service: Service, probe: str) -> dict[str, Any]:
    """What a watcher may ask about one probe besides its log."""
    recorder = service.recorders[probe]
    return {
        "path": str(recorder.writer.path),
        "rows": recorder.rows,
        "linked": recorder.linked,
        "paused": recorder.paused,
        "broken": recorder.broken,
        "unwritten": recorder.unwritten,
        "rejected": recorder.decoder.counts.total(),
        "cannot_warn": service.bells.failures,
    }

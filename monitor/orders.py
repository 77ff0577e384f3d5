"""What a person may order of the service, and into which logs each order goes.

An order becomes an event in the log of every probe that it concerns, with the order's id. Only
`status` and `reload` leave none.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from monitor.bench import Bench
from monitor.logbook import codec

AGO_MOST_S = 86_400.0
FOR_TANK = ("dose", "strike", "water")
FOR_PROBE = ("out", "back", "answer", "check", "compare", "calibration")
FOR_ANY = ("note", "silence")
ORDERED = FOR_TANK + tuple(kind for kind in FOR_PROBE if kind != "calibration")  # what is judged by


class OrderError(ValueError):
    """The order cannot be carried out; `str()` is the one line to show."""


@dataclass(frozen=True)
class Order:
    """A checked order: the event it becomes, in whose logs, how long ago it happened."""

    kind: str
    fields: Mapping[str, Any]
    probes: tuple[str, ...]
    ago_s: float


def parse(message: Mapping[str, Any], bench: Bench) -> Order:
    """A control message as an order on this bench.

    Raises OrderError naming what is wrong and what is expected.
    """
    kind, fields = message.get("order"), message.get("fields", {})
    if kind not in FOR_TANK + FOR_PROBE + FOR_ANY:
        known = ", ".join(FOR_TANK + FOR_PROBE + FOR_ANY)
        raise OrderError(f"order {str(kind)[:40]!r} is not known; expected one of {known}")
    if not isinstance(fields, dict):
        raise OrderError("fields: not an object; expected the event's fields")
    ago_s = message.get("ago_s", 0)
    if isinstance(ago_s, bool) or not isinstance(ago_s, int | float) or not math.isfinite(ago_s):
        raise OrderError("ago_s: not a number; expected seconds since it happened")
    if not 0 <= ago_s <= AGO_MOST_S:
        raise OrderError(f"ago_s: {ago_s:g}; expected 0 to {AGO_MOST_S:g} seconds")
    if not isinstance(message.get("probe"), str | None):
        raise OrderError("probe: not a name; expected one of the bench file's")
    fields = {**fields, "id": message.get("id")}
    probes = _whose(kind, fields, message, bench)
    try:
        codec.check_fields(kind, fields)
    except codec.EventError as wrong:
        raise OrderError(f"{kind}: {wrong}") from None
    if kind == "dose":
        _known(bench, fields)
    return Order(kind, fields, probes, float(ago_s))


def _whose(
    kind: str, fields: Mapping[str, Any], message: Mapping[str, Any], bench: Bench
) -> tuple[str, ...]:
    """The probes into whose logs this goes. Raises OrderError."""
    tank, probe = fields.get("tank"), message.get("probe")
    if kind in FOR_TANK and tank is None and probe in bench.probe:
        tank = bench.probe[str(probe)].tank
    if kind in FOR_TANK:
        probes = tuple(name for name, each in bench.probe.items() if each.tank == tank)
        if not probes:
            raise OrderError(f"tank {str(tank)[:40]!r} has no probe; expected {_names(bench.tank)}")
        return probes
    if probe is None and (kind in FOR_ANY or len(bench.probe) == 1):
        return tuple(bench.probe)
    if probe not in bench.probe:
        raise OrderError(f"probe {str(probe)[:40]!r} is not there; expected {_names(bench.probe)}")
    return (str(probe),)


def _known(bench: Bench, fields: Mapping[str, Any]) -> None:
    liquid, valve = fields.get("liquid"), fields.get("valve")
    if valve is not None and valve not in bench.valve:
        raise OrderError(f"valve {valve!r} is not on the bench; expected {_names(bench.valve)}")
    if liquid is not None and liquid not in bench.liquid:
        raise OrderError(f"liquid {liquid!r} is not on the bench; expected {_names(bench.liquid)}")


def _names(table: Mapping[str, Any]) -> str:
    return "one of " + ", ".join(sorted(table)) if table else "one, but the bench file has none"

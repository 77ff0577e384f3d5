"""What people told and changed in a night, in words."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import Any

from monitor.blocks import Event
from monitor.logbook.codec import utc_of
from monitor.report.night import Lane, Night
from monitor.report.words import clock, pct


def told_orders(night: Night) -> Iterable[str]:
    """All that people told and changed, but for the doses; an order to several probes once."""
    seen: set[tuple[str, str]] = set()
    for lane in night.lanes:
        for event in lane.events:
            key = event.kind, str(event.fields.get("id") or "")
            if event.kind in ("dose", "gap") or (key[1] and key in seen):
                continue
            seen.add(key)
            by = f", by {event.fields['by']}" if event.fields.get("by") else ""
            when = clock(night, event.time_s)
            yield f"{lane.tank} ({lane.probe}): {when} {_order(lane, event)}{by}"


def _order(lane: Lane, event: Event) -> str:
    """What a person told or changed, in words."""
    f = event.fields
    match event.kind:
        case "compare":
            return _compared(lane, event)
        case "check":
            return f"check standard of {_checked(f)}"
        case "out" | "back":
            why = f" ({f['why']})" if f.get("why") else ""
            return f"probe {event.kind} {'of' if event.kind == 'out' else 'in'} the tank{why}"
        case "water":
            return f"water that is no dose: {_water(f)}"
        case "strike":
            why = f" ({f['why']})" if f.get("why") else ""
            return f"dose {f['of']} struck out{why}"
        case "answer":
            return f"answered '{f['of']}': {f['answer']}"
        case "silence":
            until = utc_of(f["until_utc"]).astimezone()
            return f"silenced: {f['what']} until {until:%d %b %H:%M}"
        case "note":
            return f"note: {f['text']}"
        case "calibration":
            return f"another calibration in force: {f['name']}"
        case _:
            return f"bench file changed: {', '.join(f['changed'][:6])}"


def _water(f: Mapping[str, Any]) -> str:
    said = []
    if f.get("out_ml"):
        said.append(f"{f['out_ml']:g} mL out")
    if f.get("in_ml"):
        said.append(f"{f['in_ml']:g} mL of {f.get('liquid') or 'some water'} in")
    if f.get("volume_ml"):
        said.append(f"the tank now holds {f['volume_ml']:.0f} mL")
    return ", ".join(said)


def _checked(f: Mapping[str, Any]) -> str:
    """A check standard: what it is, what was read, and E_n where the log has it."""
    is_pct, u95 = f["salinity_pct"], 2.0 * (f.get("u_pct") or 0.0)
    read, read_u = f.get("read_pct"), f.get("read_u_pct")
    if not isinstance(read, float) or not isinstance(read_u, float) or read_u <= 0:
        return pct(is_pct, u95)
    read_u95 = 2.0 * read_u
    score = (read - is_pct) / math.hypot(read_u95, u95)
    return f"{pct(is_pct, u95)} read {pct(read, read_u95)}: E_n {score:+.1f}"


def _compared(lane: Lane, event: Event) -> str:
    """Another reading of the same water against ours: both, and E_n."""
    at = [m for m in lane.minutes if event.time_s - 120 < m.t <= event.time_s + 60]
    ours = next((m for m in reversed(at) if math.isfinite(m.mean_pct)), None)
    theirs = event.fields["salinity_pct"]
    u95 = 2.0 * (event.fields.get("u_pct") or 0.0)
    what = event.fields.get("what") or "another instrument"
    if ours is None:
        return f"{what} reads {pct(theirs, u95)}; ours gave none then"
    score = (ours.mean_pct - theirs) / max(math.hypot(ours.u95_pct, u95), 1e-9)
    our_pct = pct(ours.mean_pct, ours.u95_pct)
    return f"{what} reads {pct(theirs, u95)}, ours {our_pct}: E_n {score:+.1f}"

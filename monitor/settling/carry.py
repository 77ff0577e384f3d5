"""What the next run is told of this room: raw figures, from which it begins as if it had watched.

Salinities are never carried: readings are periods and temperatures, a still level is the reading
it was seen at and a factor. A calibration that changed converts them anew. Times stand under keys
that end in `_t` (or are `t`, `time_s`), so that they can be shifted to another run's start.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from monitor.blocks import NAN
from monitor.dosing.ledger import carried_dose, plain_dose
from monitor.settling.doubt import Doubt
from monitor.settling.history import Still
from monitor.settling.mixing import Change

if TYPE_CHECKING:
    from monitor.settling.settling import Settling

QUIET_S = 200.0  # of readings, where nothing moves
MOST_S = 900.0  # of readings after the beginning of a change


def packed(settling: Settling) -> dict[str, Any]:
    """The room's state as JSON-able figures."""
    history, mixing = settling.history, settling.mixing
    if not history.bins:
        return {}
    now = history.bins[-1][0] + 1.0
    since = now - QUIET_S
    if mixing is not None:
        since = max(mixing.change.from_t - QUIET_S, now - MOST_S)
    readings = history.since(since)
    return {
        "readings": {
            "end_t": [reading[0] + 1.0 for reading in readings],
            "us": [reading[3] for reading in readings],
            "c": [_or_none(reading[4]) for reading in readings],
        },
        "quiet": [{"known_t": a, "from_t": b} for a, b in history.starts if b > since],
        "change": _change(mixing.change, settling) if mixing is not None else None,
        "noise": _or_none(history.noise_pct / readings[-1][1]),
        "at_rest": settling.at_rest,
    }


def resumed(settling: Settling, carried: Mapping[str, Any], doubt: Doubt) -> None:
    """Begin the room with what the run before carried."""
    told = carried.get("readings")
    if not told or not told["us"]:
        return
    us = np.array(told["us"], dtype=float)
    temp_c = np.array([NAN if c is None else c for c in told["c"]], dtype=float)
    salinity = doubt.salinity_pct(us, temp_c)
    readings = zip(told["end_t"], salinity.tolist(), us.tolist(), temp_c.tolist())
    for end_t, salinity_pct, period_us, c in readings:
        if salinity_pct == salinity_pct:
            settling.remember((end_t - 1.0, salinity_pct, NAN, period_us, c))
    history = settling.history
    for start in carried.get("quiet", ()):
        history.quiet_from(start["known_t"], start["from_t"])
    if carried.get("noise") is not None and history.bins:
        history.noise_pct = carried["noise"] * history.bins[-1][1]
    settling.at_rest = carried.get("at_rest")
    if carried.get("change"):
        settling.resume(_changed(carried["change"], doubt))


def _change(change: Change, settling: Settling) -> dict[str, Any]:
    still = change.still
    assert settling.doubt is not None
    seen = _salinity(settling.doubt, still.period_us, still.temp_c)
    factor = still.level_pct / seen if seen > 0.0 else 1.0
    return {
        "from_t": change.from_t,
        "open_s": change.open_s,
        "ledger": change.ledger,
        "extra": _share(change.extra_pct, still.level_pct),
        "size": _share(change.size_pct, still.level_pct),
        "common": change.common,
        "dose": plain_dose(change.dose) if change.dose is not None else None,
        "us": _or_none(still.period_us),
        "c": _or_none(still.temp_c),
        "factor": _or_none(factor),
        "noise": _or_none(still.noise_pct / still.level_pct if still.level_pct else NAN),
        "u": _or_none(still.u_pct / still.level_pct if still.level_pct else NAN),
    }


def _share(value_pct: float, level_pct: float) -> float:
    """Of the level; 0 where none was seen, as before the first reading."""
    share = value_pct / level_pct if level_pct else 0.0
    return share if math.isfinite(share) else 0.0


def _changed(told: Mapping[str, Any], doubt: Doubt) -> Change:
    us, temp_c = _number(told["us"]), _number(told["c"])
    level = _number(told["factor"]) * _salinity(doubt, us, temp_c)
    noise, u = _number(told["noise"]) * level, _number(told["u"]) * level
    still = Still(level, noise, u, us, temp_c)
    dose = carried_dose(told["dose"]) if told["dose"] else None
    known = told["ledger"] and math.isfinite(level)
    seen = level if math.isfinite(level) else 0.0
    extra, size = told["extra"] * seen, told["size"] * seen
    return Change(told["from_t"], told["open_s"], still, dose, known, extra, size, told["common"])


def _salinity(doubt: Doubt, period_us: float, temp_c: float) -> float:
    return float(doubt.salinity_pct(np.array([period_us]), np.array([temp_c]))[0])


def _or_none(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _number(value: float | None) -> float:
    return NAN if value is None else value

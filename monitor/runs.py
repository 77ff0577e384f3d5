"""Where a run begins: the head of its log, and what the run before would tell it.

Nothing needs to have been saved when a run ended, or was killed: the end of its log, from its last
`carried` on, is judged again.
"""

from __future__ import annotations

import os
import re
from datetime import datetime
from pathlib import Path
from typing import Any

from monitor.bench import Bench
from monitor.blocks import Event
from monitor.chain import Chain, calibration_of
from monitor.logbook import reader
from monitor.logbook.codec import EventError, check_fields
from monitor.logbook.parser import Parser
from monitor.logbook.reader import Part
from monitor.orders import ORDERED
from monitor.recorder import Head, Past

STEP = 1 << 20
BACK_MOST = 1 << 26  # bytes to look back for a `carried`; far more than the writer lets pass
_CARRIED = re.compile(rb"\n(#! [0-9.]+ carried \{[^\n]*\}\n)")


def head_of(bench: Bench, probe: str) -> Head:
    """The events at the head of a part. Raises CalibrationError."""
    head: Head = [("bench", bench.for_probe(probe).as_event())]
    calibration = calibration_of(bench, probe)
    if calibration is not None:
        head.append(("calibration", calibration.as_event()))
    return head


def carried_by_last_run(folder: Path, probe: str, started: datetime, bench: Bench) -> Past:
    """What the last run of this probe would tell one that starts now on this bench.

    What a person recorded in its last, open second was never judged: it is to be met again.
    Raises LogError or OSError if its log cannot be read.
    """
    last = reader.last_part(folder, probe)
    if last is None:
        return Past({})
    text = end_of_part(last)
    parser, chain = Parser(), Chain(probe, bench, first_second=None)
    silences: dict[str, str] = {}
    unjudged: list[Event] = []
    end_t = 0.0
    for data in last.chunks() if text is None else [last.header.text().encode(), text]:
        for item in parser.feed(data):
            closed_t = chain.closed_t
            chain.feed(item)
            if chain.closed_t != closed_t:
                unjudged.clear()
            if not isinstance(item, Event):
                end_t = max(end_t, float(item.time_s[-1]))
                continue
            end_t = max(end_t, item.time_s)
            if item.kind == "carried":
                silences = _silences(item.fields.get("silences"))
            elif item.kind == "silence":
                silences[item.fields["what"]] = item.fields["until_utc"]
            if item.kind in ORDERED:
                unjudged.append(item)
    # where the wall clock went back: as if that run ended just now
    shift_s = min((last.header.started - started).total_seconds(), -end_t)
    again = [event._replace(time_s=event.time_s + shift_s) for event in unjudged]
    return Past(dict(shifted_times(chain.carry(), shift_s)), again, silences)


def _silences(told: Any) -> dict[str, str]:
    """What a log says was silenced; another's log may say anything."""
    good: dict[str, str] = {}
    for what, until_utc in told.items() if isinstance(told, dict) else ():
        try:
            check_fields("silence", {"what": what, "until_utc": until_utc})
        except EventError:
            continue
        good[what] = until_utc
    return good


def end_of_part(part: Part) -> bytes | None:
    """A plain part's text from its last `carried` on; None if it is packed or has none.

    Raises OSError.
    """
    if part.path.suffix == ".gz":
        return None
    with part.path.open("rb") as file:
        size = at = file.seek(0, os.SEEK_END)
        text = b""
        while at > 0 and size - at < BACK_MOST:
            step = min(STEP, at)
            at -= step
            file.seek(at)
            text = file.read(step) + text
            found = list(_CARRIED.finditer(text))
            if found:
                return text[found[-1].start(1) :]
    return None


def shifted_times(carried: Any, by_s: float) -> Any:
    """Carried state with its times counted from another run's `started`.

    A key that holds a time is `t`, `time_s`, or ends in `_t`: the rule of every `carry`.
    """
    if isinstance(carried, dict):
        return {
            key: _moved(value, by_s) if _is_time(key) else shifted_times(value, by_s)
            for key, value in carried.items()
        }
    if isinstance(carried, list | tuple):
        return [shifted_times(each, by_s) for each in carried]
    return carried


def _moved(value: Any, by_s: float) -> Any:
    if isinstance(value, list | tuple):
        return [_moved(each, by_s) for each in value]
    if isinstance(value, int | float) and not isinstance(value, bool):
        return value + by_s
    return value


def _is_time(key: str) -> bool:
    return key in ("t", "time_s") or key.endswith("_t")

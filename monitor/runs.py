"""Where a run begins: the head of its log, and what the run before would tell it.

Nothing needs to have been saved when a run ended, or was killed: the end of its log, from its last
`carried` on, is judged again.
"""

from __future__ import annotations

import os
import re
from collections.abc import Mapping
from datetime import datetime
from pathlib import Path
from typing import Any

from monitor.bench import Bench
from monitor.chain import calibration_of
from monitor.follow import Follower
from monitor.logbook import reader
from monitor.logbook.reader import Part
from monitor.recorder import Head

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


def carried_by_last_run(
    folder: Path, probe: str, started: datetime, bench: Bench
) -> Mapping[str, Any]:
    """What the last run of this probe would tell one that starts now on this bench.

    Raises LogError if its log cannot be read.
    """
    last = reader.last_part(folder, probe)
    if last is None:
        return {}
    follower = Follower(probe, bench, first_part=2)  # its time begins where the text does
    text = end_of_part(last)
    if text is None:
        for chunk in last.chunks():
            follower.feed(chunk)
    else:
        follower.feed(last.header.text().encode() + text)
    follower.next_part()
    shift_s = (last.header.started - started).total_seconds()
    end_t = follower.chain.closed_t
    if end_t + shift_s > 0:  # the wall clock went back: as if that run ended just now
        shift_s = -end_t
    return dict(shifted_times(follower.chain.carry(), shift_s))


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

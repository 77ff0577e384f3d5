"""The log's text: header, rows, events, file names, and back. Pure: no file is touched here.

What a person or another program may have written is read by strict grammar. A kind of event that
is not known is kept; one whose fields are wrong is malformed.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from monitor.bench import NAME
from monitor.blocks import Event

VERSION = 1
FIRST_LINE = "# stillbrine log 1"
COLUMNS = "time_s,period_us,temp_c"
LINE_MOST = 1_000_000
_NAME = re.compile(r"([A-Za-z0-9][A-Za-z0-9_-]{0,31})-(\d{8}T\d{6}Z)-(\d{3,6})\.log(\.gz)?")
_EVENT = re.compile(r"#! (-?\d{1,9}(?:\.\d{1,6})?) ([a-z][a-z_-]{0,31}) (\{.*\})", re.ASCII)
_UTC = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d{1,6})?(Z|\+00:00)", re.ASCII)
_FIGURE_MOST = 1e12
_WHOLE_MOST = 2**63


class EventError(ValueError):
    """An event's fields are wrong; `str()` says which, and what is expected."""


class HeaderError(ValueError):
    """A log's header is wrong; `str()` says what, and what is expected."""


class NoLogError(HeaderError):
    """The first line is not that of a log of any version."""


@dataclass(frozen=True)
class Header:
    """What the head of a log's file says."""

    probe: str
    started: datetime
    run: str | None = None
    part: int = 1

    def text(self) -> str:
        """The header's lines, the column line included."""
        run = f"# run: {self.run}\n" if self.run else ""
        return (
            f"{FIRST_LINE}\n# probe: {self.probe}\n# started: {utc_text(self.started)}\n"
            f"{run}# part: {self.part}\n{COLUMNS}\n"
        )


def check_first(line: str) -> None:
    """Hold the first line against the form and version. Raises NoLogError, HeaderError."""
    form = re.fullmatch(r"# stillbrine log ([0-9]{1,6})", line)
    if form is None:
        raise NoLogError(f"first line is no log's; expected {FIRST_LINE!r}")
    if int(form[1]) != VERSION:
        raise HeaderError(f"log version {int(form[1])} is not known; expected {VERSION}")


def header_of(lines: list[str]) -> Header:
    """The header from a log's comment lines, the first of the file included.

    Raises NoLogError, HeaderError.
    """
    check_first(lines[0] if lines else "")
    keys: dict[str, str] = {}
    for line in lines[1:]:
        found = re.fullmatch(r"# ([a-z_]{1,32}): (.{0,200})", line)
        if found:
            keys.setdefault(found[1], found[2].strip())
    probe, part = keys.get("probe", ""), keys.get("part", "1")
    if not NAME.fullmatch(probe):
        raise HeaderError("no valid '# probe:' line; expected a probe's name")
    if not re.fullmatch(r"[0-9]{1,6}", part) or int(part) < 1:
        raise HeaderError("'# part:' is no number; expected 1 or more")
    try:
        started = utc_of(keys.get("started", ""))
    except ValueError:
        raise HeaderError("no valid '# started:' line; expected 2026-03-14T18:00:00Z") from None
    run = keys.get("run")
    return Header(probe, started, run[:64] if run else None, int(part))


def utc_text(when: datetime) -> str:
    """A time in UTC as the log writes it, to the millisecond."""
    return when.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.") + f"{when.microsecond // 1000:03d}Z"


def utc_of(text: str) -> datetime:
    """A time in UTC from its text. Raises ValueError."""
    if not isinstance(text, str) or not _UTC.fullmatch(text):
        raise ValueError("no time in UTC")
    return datetime.fromisoformat(text)


def file_name(header: Header) -> str:
    """PROBE-YYYYMMDDTHHMMSSZ-NNN.log"""
    return f"{header.probe}-{header.started:%Y%m%dT%H%M%SZ}-{header.part:03d}.log"


def parse_name(name: str) -> tuple[str, str, int, bool] | None:
    """Probe, start, part, compressed; None if it is not named as a log is."""
    found = _NAME.fullmatch(name)
    return (found[1], found[2], int(found[3]), bool(found[4])) if found else None


def row_line(time_s: str, period_us: str, temp_c: str) -> str:
    """One row, from figures that are text already."""
    return f"{time_s},{period_us},{temp_c}\n" if temp_c else f"{time_s},{period_us}\n"


def event_line(time_s: float, kind: str, fields: Mapping[str, Any]) -> str:
    """One event's line. Raises EventError if it could not be read back."""
    check_fields(kind, fields)
    try:
        line = f"#! {time_s:.3f} {kind} {json.dumps(fields, allow_nan=False)}\n"
    except (ValueError, TypeError):
        raise EventError(f"{kind}: fields are no JSON; expected finite numbers and text") from None
    if not _EVENT.fullmatch(line, 0, len(line) - 1):
        raise EventError("time or kind is none of a log; expected '#! TIME KIND {...}'")
    if len(line) > LINE_MOST:
        raise EventError(f"{len(line)} bytes; expected a line below 1 MB")
    return line


def event_of(line: str) -> Event:
    """An event from its line, LF left aside. Raises EventError."""
    found = _EVENT.fullmatch(line)
    if found is None:
        raise EventError("not of the form '#! TIME KIND {...}'")
    try:
        fields = json.loads(
            found[3],
            parse_constant=_no_constant,
            parse_float=_finite,
            parse_int=_whole,
            object_pairs_hook=_once,
        )
    except (ValueError, RecursionError):
        raise EventError("not one JSON object") from None
    check_fields(found[2], fields)
    return Event(float(found[1]), found[2], fields)


def _no_constant(name: str) -> Any:
    raise ValueError(f"{name} is no JSON")


def _finite(text: str) -> float:
    value = float(text)
    if not math.isfinite(value):
        raise ValueError("beyond any number")
    return value


def _whole(text: str) -> int:
    value = int(text)
    if abs(value) > _WHOLE_MOST:
        raise ValueError("beyond any count")
    return value


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    fields = dict(pairs)
    if len(fields) != len(pairs):
        raise ValueError("a key stands twice")
    return fields


# What the fields of each kind must be. A trailing ? marks one that may be missing or null.

Check = Callable[[Any], bool]


def _number(value: Any) -> bool:
    return (
        isinstance(value, int | float)
        and not isinstance(value, bool)
        and abs(value) <= _FIGURE_MOST  # which no NaN is
    )


def _amount(value: Any) -> bool:
    return _number(value) and value >= 0


def _text(value: Any) -> bool:
    return isinstance(value, str) and len(value) <= 2000


def _name(value: Any) -> bool:
    return isinstance(value, str) and NAME.fullmatch(value) is not None


def _utc(value: Any) -> bool:
    return isinstance(value, str) and _UTC.fullmatch(value) is not None


def _count(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and value >= 0


def _of(value: Any) -> bool:
    return _text(value) or _number(value)


def _link(value: Any) -> bool:
    return value in ("lost", "back")


EXPECTED: Mapping[Check, str] = {
    _number: "a finite number",
    _amount: "a finite number, 0 or more",
    _text: "text of at most 2000 characters",
    _name: "a name",
    _utc: "a time such as 2026-03-14T18:00:00Z",
    _count: "a whole number",
    _of: "an id, or a TIME",
    _link: '"lost" or "back"',
}

KINDS: Mapping[str, Mapping[str, Check]] = {
    "dose": {
        "tank": _name,
        "liquid?": _name,
        "valve?": _name,
        "volume_ml?": _amount,
        "volume_u_ml?": _amount,
        "open_s?": _amount,
        "by?": _text,
        "note?": _text,
    },
    "strike": {"of": _of, "why?": _text, "by?": _text},
    "water": {
        "tank?": _name,
        "out_ml?": _amount,
        "in_ml?": _amount,
        "liquid?": _name,
        "volume_ml?": _amount,
        "u_ml?": _amount,
        "by?": _text,
    },
    "out": {"why?": _text, "by?": _text},
    "back": {"why?": _text, "by?": _text},
    "bench": {},
    "calibration": {},
    "carried": {},
    "answer": {"of": _text, "from_t?": _number, "answer": _text, "by?": _text},
    "check": {"salinity_pct": _amount, "u_pct?": _amount, "what?": _text, "by?": _text},
    "compare": {"salinity_pct": _amount, "u_pct?": _amount, "what?": _text, "by?": _text},
    "alive": {"utc?": _utc},
    "rejected": {"n": _count, "why?": _text, "sample?": _text},
    "gap": {"link": _link, "why?": _text},
    "clock": {"before?": _utc, "after?": _utc, "slept_s?": _amount},
    "note": {"text": _text, "by?": _text},
    "silence": {"what": _text, "until_utc": _utc, "by?": _text},
    "end": {},
}


def check_fields(kind: str, fields: Any) -> None:
    """Hold an event's fields against what its kind asks for. Raises EventError."""
    if not isinstance(fields, Mapping):
        raise EventError("fields are no object; expected one JSON object")
    for marked, check in KINDS.get(kind, {}).items():
        key = marked.removesuffix("?")
        value = fields.get(key)
        if value is None:
            if key == marked:
                raise EventError(f"{key}: missing; expected {EXPECTED[check]}")
        elif not check(value):
            raise EventError(f"{key}: {str(value)[:40]!r}; expected {EXPECTED[check]}")
    if kind == "dose":
        _check_dose(fields)
    if kind == "water" and not any(fields.get(k) for k in ("out_ml", "in_ml", "volume_ml")):
        raise EventError("water: no out_ml, in_ml or volume_ml; expected one of them")
    if fields.get("id") is not None and not (isinstance(fields["id"], str) and fields["id"]):
        raise EventError("id: not text; expected an order's id")


def _check_dose(fields: Mapping[str, Any]) -> None:
    by_volume = fields.get("volume_ml") is not None and fields.get("liquid") is not None
    by_valve = fields.get("valve") is not None and fields.get("open_s") is not None
    if not (by_volume or by_valve):
        raise EventError("dose: no amount; expected liquid and volume_ml, or valve and open_s")

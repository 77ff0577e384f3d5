"""The wire's bytes to readings, without any I/O.

Rules:
- A line ends with LF or CRLF. `PERIOD` or `PERIOD,TEMP`, an NMEA 0183 style check at will; all of
  the grammar is in `_LINE`. Nothing is guessed: what does not match whole is no reading.
- What is no reading is counted with its reason, a sample of it escaped, and never stops anything.
- A line may come in any number of pieces; pieces never change what comes out.
- No more than one line of 64 bytes is kept, whatever is sent.
- Figures leave as text, with the digits that lose nothing of what was sent.
"""

from __future__ import annotations

import functools
import operator
import re
from collections import Counter
from collections.abc import Callable
from decimal import ROUND_HALF_EVEN, Context, Decimal
from typing import Any, Literal, NamedTuple, Protocol

LINE_MAX = 64  # bytes, the line's end left aside
SAMPLE_MAX = 40
BOOT_S = 3.0  # a microcontroller that just started may say what it likes
TEMP_C = (-5.0, 60.0)
DECIMALS = 9  # at most, of a period sent in another unit than us

# Possessive runs of blanks: a hostile line costs no more than a good one.
_LINE = re.compile(
    r"[ \t]*+([0-9]{1,12}(?:\.[0-9]{1,9})?)"
    r"(?:(?:[ \t]++(?:[,;][ \t]*+)?|[,;][ \t]*+)(-?[0-9]{1,3}(?:\.[0-9]{1,6})?)?)?"
    r"[ \t]*+(\*[0-9A-Fa-f]{2})?\r?"
)
_SHIFT = {"ms": 3, "s": 6}
_EXACT = Context(prec=60, rounding=ROUND_HALF_EVEN)


class Reading(NamedTuple):
    """One reading as text: the period in us ("0" = no pulse), the temperature in C or ""."""

    period_us: str
    temp_c: str


class Wire(Protocol):
    """What the decoder must know of a probe."""

    @property
    def period_unit(self) -> Literal["us", "ms", "s", "counts"]: ...

    @property
    def tick_hz(self) -> float | None: ...


class Decoder:
    """Bytes in any pieces to readings; counts what is none.

    counts : by reason, since the decoder was made
    boot_lines : lines dropped in the first BOOT_S after opening, which are no fault
    """

    def __init__(self, wire: Wire) -> None:
        self.counts: Counter[str] = Counter()
        self.boot_lines = 0
        self._convert = _converter(wire.period_unit, wire.tick_hz)
        self._tail = ""
        self._skipping = False
        self._opened_s = -BOOT_S
        self._told: Counter[str] = Counter()
        self._sample = ""
        self._temp_noted = False
        self._notes: list[str] = []

    def opened(self, now_s: float) -> None:
        """The port was opened at `now_s`: half a line from before will not go on."""
        if self._tail:
            self._reject("cut off", self._tail, now_s)
        self._tail, self._skipping = "", False
        self._opened_s = now_s

    def feed(self, data: bytes, now_s: float) -> list[Reading]:
        """Readings that `data`, arrived at `now_s`, completes."""
        *lines, tail = (self._tail + data.decode("latin-1")).split("\n")
        if lines and self._skipping:
            del lines[0]
            self._skipping = False
        readings = self._read(lines, now_s)
        if len(tail) > LINE_MAX + 1 and not self._skipping:  # one more: a CR may be its last
            self._reject("too long", tail, now_s)
            self._skipping = True
        self._tail = "" if self._skipping else tail
        return readings

    def take_rejected(self) -> dict[str, Any] | None:
        """Fields of a `rejected` event for what was no reading since the last call."""
        if not self._told:
            return None
        why = ", ".join(f"{reason} {n}" for reason, n in sorted(self._told.items()))
        told = {"n": self._told.total(), "why": why, "sample": self._sample}
        self._told.clear()
        return told

    def take_notes(self) -> list[str]:
        """What is to be said once, a line each."""
        notes, self._notes = self._notes, []
        return notes

    def _read(self, lines: list[str], now_s: float) -> list[Reading]:
        readings: list[Reading] = []
        match, convert = _LINE.fullmatch, self._convert
        for line in lines:
            long = len(line) > LINE_MAX and len(line.removesuffix("\r")) > LINE_MAX
            found = None if long else match(line)
            if found is None:
                self._reject(_reason(line), line, now_s)
                continue
            period, temp, check = found.groups()
            if check and not _check_holds(line, found.start(3), check):
                self._reject("check wrong", line, now_s)
                continue
            if temp and not TEMP_C[0] <= float(temp) <= TEMP_C[1]:
                self._note_temp(temp)
                temp = None
            if convert is not None:
                period = convert(period)
                if not period:
                    self._reject("period beyond any", line, now_s)
                    continue
            readings.append(Reading(period, temp or ""))
        return readings

    def _reject(self, reason: str, line: str, now_s: float) -> None:
        if now_s - self._opened_s < BOOT_S:
            self.boot_lines += 1
            return
        if not self._told:
            self._sample = escaped(line)
        self.counts[reason] += 1
        self._told[reason] += 1

    def _note_temp(self, temp: str) -> None:
        if not self._temp_noted:
            self._temp_noted = True
            what = "an error value of the thermometer" if _is_error(temp) else "outside -5 to 60 C"
            self._notes.append(f"temperature {temp} is {what}: taken as none, the period stands")


def escaped(line: str) -> str:
    """At most SAMPLE_MAX characters of printable ASCII that show a line of any bytes."""
    out = ""
    for char in line[:SAMPLE_MAX]:
        shown = char if " " <= char <= "~" and char != "\\" else f"\\x{ord(char):02x}"
        if len(out) + len(shown) > SAMPLE_MAX:
            break
        out += shown
    return out


def _reason(line: str) -> str:
    bare = line.removesuffix("\r")
    if len(bare) > LINE_MAX:
        return "too long"
    if not bare:
        return "empty"
    return "not a reading" if bare.isascii() else "not ASCII"


def _check_holds(line: str, star: int, check: str) -> bool:
    return functools.reduce(operator.xor, line[:star].encode("latin-1"), 0) == int(check[1:], 16)


def _is_error(temp: str) -> bool:
    return float(temp) in (85.0, -127.0)


def _converter(unit: str, tick_hz: float | None) -> Callable[[str], str] | None:
    """From a period's text in `unit` to its text in us, "" where no log could hold it."""
    if unit == "us":
        return None
    if unit == "counts":
        if tick_hz is None:
            raise ValueError("counts of a clock need its tick_hz")
        tick_us = _EXACT.divide(Decimal(10) ** 6, Decimal(repr(tick_hz)))
        # counts repeat: the same few thousand come again and again
        return functools.lru_cache(maxsize=4096)(lambda text: _from_counts(text, tick_us))
    shift = _SHIFT[unit]
    return functools.lru_cache(maxsize=4096)(lambda text: _plain(Decimal(text).scaleb(shift)))


def _from_counts(text: str, tick_us: Decimal) -> str:
    plain = _plain(_EXACT.multiply(Decimal(text), tick_us))
    return plain.rstrip("0").rstrip(".") if "." in plain else plain


def _plain(period: Decimal) -> str:
    """At most twelve digits before the point and nine behind it."""
    exponent = period.as_tuple().exponent
    assert isinstance(exponent, int)  # of a finite number
    if exponent < -DECIMALS:
        period = period.quantize(Decimal(1).scaleb(-DECIMALS), context=_EXACT)
    text = f"{period:f}"
    return text if len(text.partition(".")[0]) <= 12 else ""

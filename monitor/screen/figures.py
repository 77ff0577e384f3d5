"""Numbers and times as the screen writes them: digits follow the doubt, widths keep still."""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np

from monitor.water import units
from monitor.water.media import OutOfRangeError, medium

UNITS = ("%", "g/kg", "mS/cm")
WHOLE = 2  # places before the point, at least
PLACES = 5  # and behind it
DOUBT_CELLS = 9
VALUE_CELLS = WHOLE + 1 + PLACES + DOUBT_CELLS


@dataclass(frozen=True)
class Scale:
    """A unit for the values of one lane: `name` as the heads show it."""

    name: str
    medium: str = "NaCl"

    def of(self, pct: float) -> float:
        """A salinity in %, in this unit; NaN where the unit's law ends."""
        if self.name == "g/kg":
            return 10.0 * pct
        if self.name == "mS/cm":
            try:
                return float(units.ms_per_cm_from_pct(np.array(pct), medium(self.medium)))
            except OutOfRangeError:
                return math.nan
        return pct

    def width(self, pct: float, u95: float) -> float:
        """A doubt in %, in this unit, at a salinity."""
        if self.name in ("%", "us"):
            return u95
        return 0.5 * abs(self.of(pct + u95) - self.of(max(pct - u95, 0.0)))


def places(u95: float) -> int:
    """Decimals that mean something beside this doubt: one digit of it, two where it begins with 1.

    Common practice for rounding a result to its uncertainty.
    """
    if not math.isfinite(u95) or u95 <= 0:
        return 4
    exponent = math.floor(math.log10(u95))
    leading = u95 / 10.0**exponent
    return min(max(-exponent + (1 if leading < 1.95 else 0), 0), PLACES)


def pointed(text: str, whole: int = WHOLE, behind: int = PLACES) -> str:
    """A number's text padded so that its point always stands in the same column."""
    before, point, after = text.partition(".")
    return f"{before:>{whole}}{point or ' '}{after:<{behind}}"


def value_text(value: float, u95: float, scale: Scale) -> str:
    """A value with its doubt, always of the same width; dashes where there is none."""
    shown = scale.of(value)
    if not math.isfinite(shown):
        return f"{pointed('--')}{'':{DOUBT_CELLS}}"
    doubt = scale.width(value, u95) if math.isfinite(u95) else math.nan
    behind = places(doubt) if math.isfinite(doubt) else (1 if scale.name == "us" else 4)
    text = pointed(f"{shown:.{behind}f}")
    if len(text) > WHOLE + 1 + PLACES:
        room = WHOLE + 1 + PLACES
        text = f"{shown:{room}.{min(behind, max(room - 1 - len(f'{shown:.0f}'), 0))}f}"
    if not math.isfinite(doubt):
        return f"{text}{'':{DOUBT_CELLS}}"
    return text + f"±{doubt:<{DOUBT_CELLS}.{behind}f}"[:DOUBT_CELLS]


def short_text(value: float, u95: float, scale: Scale) -> str:
    """A value within a sentence."""
    shown = scale.of(value)
    if not math.isfinite(shown):
        return "unknown"
    return f"{shown:.{places(scale.width(value, u95))}f}"


def length(seconds: float) -> str:
    """A length of time in words."""
    if not math.isfinite(seconds):
        return "?"
    seconds = max(seconds, 0.0)
    if seconds < 99.5:
        return f"{seconds:.0f} s"
    if seconds < 5970.0:
        return f"{seconds / 60.0:.0f} min"
    minutes = round(seconds / 60.0)
    if minutes < 2880:
        return f"{minutes // 60} h {minutes % 60:02d}"
    return f"{seconds / 86400.0:.0f} days"


@dataclass(frozen=True)
class Clock:
    """Local time of day for the lanes' seconds."""

    zero: datetime  # local, with its offset

    def at(self, t: float) -> datetime:
        """The local time at t; the zero where t is no time."""
        if not math.isfinite(t) or abs(t) > 1e9:
            return self.zero
        return (self.zero + timedelta(seconds=t)).astimezone(self.zero.tzinfo)

    def minute(self, t: float) -> str:
        """HH:MM"""
        return f"{self.at(t):%H:%M}"

    def second(self, t: float) -> str:
        """HH:MM:SS"""
        return f"{self.at(t):%H:%M:%S}"

    def whole(self, t: float) -> str:
        """Date, time and offset, for the head of the sheet."""
        when = self.at(t)
        offset = f"{when:%z}"
        return f"{when:%H:%M:%S} {offset[:3]}:{offset[3:]}  {when:%a %d %b %Y}"

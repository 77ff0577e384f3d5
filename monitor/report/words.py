"""Times and salinities of a night as a person reads them."""

from __future__ import annotations

import math

from monitor.report.night import Night


def clock(night: Night, t: float) -> str:
    """Local time of day, with the date where it is not the night's first."""
    when, first = night.when(t), night.when(night.from_t)
    return when.strftime("%H:%M:%S" if when.date() == first.date() else "%d %b %H:%M:%S")


def span(night: Night, from_t: float, to_t: float | None) -> str:
    """From when to when, and how long."""
    end = night.to_t if to_t is None else to_t
    stamp = clock(night, end)
    if night.when(from_t).date() == night.when(end).date():
        stamp = stamp[-len("00:00:00") :]
    until = f"until {stamp}" if to_t is not None else "and it lasts"
    return f"from {clock(night, from_t)} {until} ({length(end - from_t)})"


def length(seconds: float) -> str:
    """A length of time in words."""
    if seconds < 120:
        return f"{seconds:.0f} s"
    if seconds < 7200:
        return f"{seconds / 60:.0f} min"
    return f"{seconds / 3600:.1f} h"


def pct(value: float | None, u95: float | None = None) -> str:
    """A salinity with as many digits as its doubt allows."""
    if value is None or not math.isfinite(value):
        return "no salinity"
    if u95 is None or not math.isfinite(u95) or u95 <= 0:
        return f"{value:.4f} %"
    digits = max(2, min(6, 1 - math.floor(math.log10(u95))))
    return f"{value:.{digits}f} +- {u95:.{digits}f} %"


def size(value: float) -> str:
    """A doubt with two digits that count, never as a power of ten."""
    return f"{value:.{max(2, min(7, 1 - math.floor(math.log10(value))))}f}" if value > 0 else "0"

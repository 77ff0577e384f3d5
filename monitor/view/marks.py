"""What is marked on the axis of time: doses, and spans such as faults, lifts, lost links."""

from __future__ import annotations

from dataclasses import dataclass

from monitor.blocks import Floats


@dataclass
class Dosed:
    """A dose, as the screen shows it. Times s, volumes mL."""

    time_s: float
    open_s: float
    volume_ml: float
    liquid: str
    key: str
    struck: bool = False


@dataclass
class Span:
    """Something that lasts: `what` is a fault's name, `out`, `link` ..; `to_t` None while it does.

    `raw`: times and periods (us) read around its beginning, where they tell why it was said.
    """

    what: str
    from_t: float
    to_t: float | None
    why: str = ""
    raw: tuple[Floats, Floats] | None = None


@dataclass(frozen=True)
class Note:
    """A word that somebody left at a time."""

    time_s: float
    text: str

"""All acts by name, as the keys call them."""

from __future__ import annotations

from collections.abc import Callable

from monitor.screen import acts, questions
from monitor.screen.figures import Clock
from monitor.screen.forms import Form
from monitor.view import Lane

_FORMS: dict[str, Callable[[Lane], Form | None]] = {
    "dose": acts.dose,
    "note": acts.note,
    "lift": acts.lift,
    "water": acts.water,
    "answer": questions.answer,
    "measured": questions.measured,
    "calibration": questions.calibration,
}
NOTHING = {
    "dose": "the bench has no liquids",
    "strike": "there is no dose to strike out",
    "answer": "nothing is asked",
    "calibration": "the bench file names no sets of standards",
}
NAMES = (*_FORMS, "strike", "silence")


def form(name: str, lane: Lane, clock: Clock, until: Callable[[float], str]) -> Form | None:
    """The form of an act; None where there is nothing to do, which `NOTHING` says in words.

    `until` gives the UTC text of so many seconds ahead.
    """
    if name == "strike":
        return acts.strike(lane, clock)
    if name == "silence":
        return acts.silence(lane, until)
    return _FORMS[name](lane)

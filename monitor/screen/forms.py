"""A form: what is typed, what it would do, and the order that it becomes. Pure.

An act shows its effect before it is done: every form has a preview, a dose a `Plan` that the
landing view draws. Nothing is ordered before Enter is pressed on a form without a fault.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

from monitor.printable import printable
from monitor.screen.landing import Plan
from monitor.view import Lane

TEXT_MOST = 200
_NUMBER = re.compile(r"[0-9]{1,7}([.,][0-9]{1,6})?")


@dataclass
class Field:
    """One line of a form: free text, or one of `choices`."""

    name: str
    label: str
    value: str = ""
    choices: tuple[str, ...] = ()

    def turn(self, by: int) -> None:
        """The next or previous choice."""
        if self.choices:
            at = self.choices.index(self.value) if self.value in self.choices else 0
            self.value = self.choices[(at + by) % len(self.choices)]


@dataclass
class Preview:
    """What the act would do: lines to show, a fault that hinders it, the order."""

    lines: list[str] = field(default_factory=list)
    cautions: list[str] = field(default_factory=list)
    wrong: str = ""
    plan: Plan | None = None
    order: tuple[str, dict[str, Any]] | None = None
    ago_s: float = 0.0


@dataclass
class Form:
    """An act being filled in."""

    title: str
    fields: list[Field]
    preview_of: Callable[[Form, Lane], Preview]
    at: int = 0

    def __getitem__(self, name: str) -> str:
        return next((each.value for each in self.fields if each.name == name), "").strip()

    def press(self, key: str, char: str | None) -> None:
        """A key, or the character that it types."""
        if key in ("tab", "down"):
            self.move(1)
        elif key in ("shift+tab", "up"):
            self.move(-1)
        elif key in ("left", "right"):
            self.turn(-1 if key == "left" else 1)
        elif key == "backspace":
            self.rub()
        elif char is not None:
            self.type(char)

    def move(self, by: int) -> None:
        """To the next or previous field."""
        if self.fields:
            self.at = (self.at + by) % len(self.fields)

    def turn(self, by: int) -> None:
        """Change a choice."""
        if self.fields:
            self.fields[self.at].turn(by)

    def type(self, char: str) -> None:
        """A character for the field at hand."""
        if not self.fields:
            return
        here = self.fields[self.at]
        if not here.choices and char.isprintable() and len(here.value) < TEXT_MOST:
            here.value += char

    def rub(self) -> None:
        """Take the last character back."""
        if self.fields and not self.fields[self.at].choices:
            here = self.fields[self.at]
            here.value = here.value[:-1]

    def preview(self, lane: Lane) -> Preview:
        """What it would do as it stands."""
        return self.preview_of(self, lane)


def number(text: str) -> float | None:
    """A number as typed, comma or point; None if it is none."""
    return float(text.replace(",", ".")) if _NUMBER.fullmatch(text) else None


def figures_of(form: Form, names: tuple[str, ...], told: Preview) -> dict[str, float | None]:
    """The numbers of these fields; what is no number stands in `told.wrong`."""
    figures: dict[str, float | None] = {}
    for name in names:
        figures[name] = number(form[name]) if form[name] else None
        if form[name] and figures[name] is None:
            label = next(each.label for each in form.fields if each.name == name)
            told.wrong = f"{label}: {printable(form[name], 20)!r} is no number; expected 12.5"
    return figures

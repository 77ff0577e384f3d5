"""Colours of the inks: Okabe and Ito's, on dark or on white; weights alone without colour.

Okabe and Ito, Color Universal Design (2008): hues that colour-blind people tell apart. Nothing is
told by colour alone: what needs a person has capitals, a mark or a weight as well.
"""

from __future__ import annotations

import os

from rich.style import Style

DARK = {
    "ink": "#c8d0d4",
    "paper": "#0e1316",
    "faint": "#6f7d85",
    "trace": "#e6ecef",
    "expect": "#56b4e9",
    "mark": "#e6ecef",
    "doubt": "#f0e442",
    "act": "#ff7f2a",
    "plan": "#2fd0a0",
    "aim": "#1a2a33",
}
LIGHT = {
    "ink": "#20282c",
    "paper": "#ffffff",
    "faint": "#7d888e",
    "trace": "#101518",
    "expect": "#0072b2",
    "mark": "#101518",
    "doubt": "#8a5f00",
    "act": "#c04c00",
    "plan": "#007a5a",
    "aim": "#e3edf3",
}
_BOLD = ("mark", "doubt", "act", "strong", "alarm")


class Palette:
    """Styles by the names of inks and papers."""

    def __init__(self, colours: dict[str, str] | None) -> None:
        """`colours` None: weights only."""
        self._colours = colours
        self._styles: dict[str, Style] = {}

    @property
    def page(self) -> tuple[str, str] | None:
        """Colours of the page, text and paper."""
        return (self._colours["ink"], self._colours["paper"]) if self._colours else None

    def style(self, name: str) -> Style:
        """The style of an ink, or of an ink on a paper (`trace/aim`)."""
        if name not in self._styles:
            ink, _, paper = name.partition("/")
            self._styles[name] = self._made(ink, paper)
        return self._styles[name]

    def _made(self, ink: str, paper: str) -> Style:
        bold = ink in _BOLD
        if self._colours is None:
            return Style(
                bold=bold, dim=ink == "faint", reverse=ink == "alarm", underline=ink == "doubt"
            )
        if ink == "alarm":
            return Style(color=self._colours["paper"], bgcolor=self._colours["act"], bold=True)
        colour = self._colours.get(ink, self._colours["ink"])
        behind = self._colours.get(paper or "paper", self._colours["paper"])
        return Style(color=colour, bgcolor=behind, bold=bold)


def light_terminal() -> bool:
    """Whether the terminal says that its paper is white."""
    return os.environ.get("COLORFGBG", "").rpartition(";")[2] in ("7", "15")

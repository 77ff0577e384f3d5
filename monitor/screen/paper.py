"""The widget: rows of styled text, of which only those that changed are drawn again."""

from __future__ import annotations

from rich.segment import Segment
from textual.geometry import Region
from textual.strip import Strip
from textual.widget import Widget

from monitor.screen import palette
from monitor.screen.draw import Run


class Paper(Widget):
    """The rows of a sheet; only those that changed are drawn again."""

    DEFAULT_CSS = "Paper { width: 100%; height: 100%; }"
    can_focus = True

    def __init__(self) -> None:
        super().__init__()
        self._rows: list[list[Run]] = []
        self.strips: list[Strip] = []
        self.colours = palette.Palette(palette.DARK)

    def show(self, rows: list[list[Run]], width: int) -> None:
        """Take these rows."""
        same = len(rows) == len(self._rows)
        changed = [i for i, row in enumerate(rows) if not same or row != self._rows[i]]
        if not changed:
            return
        style = self.colours.style
        if not same:
            self.strips = [Strip([])] * len(rows)
        for i in changed:
            self.strips[i] = Strip([Segment(text, style(ink)) for text, ink in rows[i]], width)
        self._rows = rows
        self.refresh(*(Region(0, i, width, 1) for i in changed))

    def forget(self) -> None:
        """Draw all again next time."""
        self._rows, self.strips = [], []

    def render_line(self, y: int) -> Strip:
        """One row."""
        return self.strips[y] if y < len(self.strips) else Strip.blank(self.size.width)

"""What a person has chosen to look at, and the tanks as they stand before that person."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

from monitor.screen import axis, lanes, words
from monitor.screen.axis import Axis
from monitor.screen.figures import Clock, Scale
from monitor.screen.forms import Form
from monitor.screen.source import Source
from monitor.screen.words import Said
from monitor.view import Lane

LABEL_MOST = 400
SMALL_WIDTH, SMALL_HEIGHT = 60, 16  # below, sentences and strips only


@dataclass
class Look:
    """What the person has chosen to look at."""

    chosen: int = 0  # index among the source's lanes
    span_s: float = 240.0
    end_t: float | None = None  # None: the present
    cursor_t: float | None = None
    unit: str = "%"
    worst_first: bool = False
    first: int = 0  # lanes scrolled off the top
    helping: bool = False
    form: Form | None = None
    message: Said | None = None
    note: str = ""
    mono: bool = False
    drawn: lanes.Drawn = field(default_factory=lanes.Drawn)

    def zoom(self, by: float) -> None:
        """Show less or more time."""
        self.span_s = min(max(self.span_s * by, axis.SPAN_LEAST_S), axis.SPAN_MOST_S)

    def pan(self, cells: int, on: Axis | None, now_s: float) -> None:
        """Move the cursor by cells, or what is seen by eighths of it."""
        if self.cursor_t is not None:
            cell_s = on.cell_s if on is not None else self.span_s / 60.0
            self.cursor_t = min(self.cursor_t + cells * cell_s, now_s)
            if on is not None and self.cursor_t < on.from_t:
                self.end_t = self.cursor_t + 0.5 * self.span_s
            return
        end = (self.end_t if self.end_t is not None else now_s) + cells * self.span_s / 8.0
        self.end_t = None if end >= now_s else max(end, 0.0)


class Tank(NamedTuple):
    place: int
    lane: Lane
    name: str
    said: Said
    scale: Scale


def tanks(source: Source, look: Look, clock: Clock) -> list[Tank]:
    """The lanes with their names and sentences, in the order in which they stand."""
    known: list[Tank] = []
    shared = [lane.tank for lane in source.lanes]
    for i, lane in enumerate(source.lanes):
        name = lane.label[:LABEL_MOST]
        if shared.count(lane.tank) > 1:
            name = f"{name}/{lane.probe}"
        scale = Scale(look.unit if lane.calibrated else "us", lane.medium)
        known.append(Tank(i, lane, name, words.state(lane, source.now_s, clock, scale), scale))
    if look.worst_first:
        known.sort(key=lambda tank: -words.RANK[tank.said.tone])
    return known


def chosen(look: Look, known: list[Tank]) -> Tank:
    return next((tank for tank in known if tank.place == look.chosen), known[0])

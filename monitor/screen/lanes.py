"""The lanes: one tank, one line, one sentence; its trace below on the axis that all share."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from monitor.screen import axis, draw, figures, inks, landing, text
from monitor.screen.axis import Axis
from monitor.screen.draw import Canvas, Run
from monitor.screen.figures import Scale
from monitor.screen.landing import LEAST_BANDS, MARGIN
from monitor.screen.words import Said
from monitor.view import Lane

AROUND_AIM = 0.75  # of the aim's width, shown on either side of it
TRACE_LEAST = 16  # cells


class Widths(NamedTuple):
    """Cells of a lane's columns; `sentence` 0: it has a row of its own."""

    name: int
    strip: int
    sentence: int
    trace: int  # beside the sentence, in lanes of one row


def widths(width: int, any_aim: bool, rows: int) -> Widths:
    """How a row of so many cells is shared out."""
    name = 20 if width >= 110 else 9 if width < 60 else 10 if any_aim else 17
    around = 1 + name + 1 + figures.VALUE_CELLS + 1
    strip = 0 if not any_aim else 24 if width >= 140 else 17 if width >= 100 else 11
    left = width - around - (strip + 1 if strip else 0)
    if width < 60:
        return Widths(name, max(width - around, 0) if any_aim else 0, 0, 0)
    if rows == 1 and left >= 42 + TRACE_LEAST + 1:
        return Widths(name, strip, 42, left - 43)
    return Widths(name, strip, left, 0)


def line(lane: Lane, name: str, said: Said, scale: Scale, wide: Widths, chosen: bool) -> list[Run]:
    """Name, value with its doubt, its place on the aim, the sentence."""
    tone = inks.TONES[said.tone]
    doubtful = lane.belief != "believed"
    value = figures.value_text(lane.value, lane.u95, scale)
    runs: list[Run] = [
        ("▶" if chosen else " ", "strong"),
        (text.fit(name, wide.name) + " ", "strong" if chosen else ""),
        (value + " ", "faint" if doubtful else ""),
    ]
    if wide.strip:
        runs.append((_strip(lane, wide.strip), tone or "faint"))
        runs.append((" ", ""))
    if wide.sentence:
        runs += text.filled(said.text, wide.sentence, tone)
    return runs


def _strip(lane: Lane, width: int) -> str:
    aim = lane.aim
    if aim is None:
        return " " * width
    around = AROUND_AIM * (aim[1] - aim[0])
    outlook = landing.expected(lane)
    return draw.strip(
        width,
        (aim[0] - around, aim[1] + around),
        aim,
        lane.value,
        lane.u95,
        outlook["salinity_pct"] if outlook else math.nan,
        hollow=lane.belief != "believed",
    )


def trace(lane: Lane, on: Axis, height: int) -> list[list[Run]]:
    """The lane's trace in so many rows, faults in their ink, doses and the expected rest marked."""
    held, faint = axis.columns(lane, on)
    seen = np.concatenate((held.low, held.high))
    seen = seen[np.isfinite(seen)]
    low, high = 0.0, 1.0
    if len(seen):
        least = LEAST_BANDS * lane.band if lane.calibrated else 1e-3 * abs(float(seen[0]))
        low, high = draw.nice_bounds(float(seen.min()), float(seen.max()), max(least, 1e-9))
    canvas = Canvas(on.width, height, low, high)
    if faint is not None:
        canvas.curve(faint, inks.FAINT)
    canvas.curve(held, inks.TRACE)
    _faults(canvas, lane, on)
    outlook = landing.expected(lane)
    if outlook is not None:
        rest_t = outlook["t"] + outlook["rest_in_s"]
        row = canvas.row_of(min(max(outlook["salinity_pct"], low), high))
        canvas.level(row, on.now_cell + 1, on.cell(rest_t), inks.EXPECT, "╌")
        canvas.upright(on.cell(rest_t), inks.EXPECT, "┊", over=True)
    for dose in lane.doses:
        if not dose.struck and on.from_t <= dose.time_s < on.to_t:
            canvas.put(height - 1, on.cell(dose.time_s), "▲", inks.MARK)
    canvas.upright(on.now_cell, inks.FAINT, "│")
    return [canvas.runs(i, inks.INKS, inks.PAPERS) for i in range(height)]


def _faults(canvas: Canvas, lane: Lane, on: Axis) -> None:
    for first, last in landing.faulty(lane, on):
        canvas.recolour(first, last, inks.TRACE, inks.DOUBT)
        canvas.level(canvas.height - 1, first, last, inks.DOUBT, "~")


class Drawn:
    """Rows as they were drawn last, for as long as nothing in them has changed."""

    def __init__(self) -> None:
        self._rows: dict[Lane, tuple[object, list[list[Run]]]] = {}
        self._traces: dict[Lane, tuple[object, list[list[Run]]]] = {}

    def rows(
        self,
        lane: Lane,
        name: str,
        said: Said,
        scale: Scale,
        width: int,
        any_aim: bool,
        per_lane: int,
        on: Axis,
        chosen: bool,
    ) -> list[list[Run]]:
        """The rows of a lane: `per_lane` of them."""
        place = (on.from_t, on.cell_s, on.width, on.now_cell)
        key = (lane.version, said, scale, width, any_aim, per_lane, chosen, place)
        held = self._rows.get(lane)
        if held is None or held[0] != key:
            wide = widths(width, any_aim, per_lane)
            drawn = self._drawn(lane, name, said, scale, width, wide, per_lane, on, chosen)
            held = self._rows[lane] = (key, drawn)
        return held[1]

    def _drawn(
        self,
        lane: Lane,
        name: str,
        said: Said,
        scale: Scale,
        width: int,
        wide: Widths,
        per_lane: int,
        on: Axis,
        chosen: bool,
    ) -> list[list[Run]]:
        first = line(lane, name, said, scale, wide, chosen)
        if wide.trace:
            first = [*first, (" ", ""), *self._trace(lane, on, 1)[0]]
        told = [text.row(first, width)]
        if per_lane == 1:
            return told
        if not wide.sentence:
            tone = inks.TONES[said.tone]
            sentence = text.filled(said.text, width - 2, tone)
            return [*told, text.row([("  ", ""), *sentence], width)]
        margin = (" " * MARGIN, "")
        traced = self._trace(lane, on, per_lane - 1)
        return told + [text.row([margin, *runs], width) for runs in traced]

    def _trace(self, lane: Lane, on: Axis, height: int) -> list[list[Run]]:
        """The trace, drawn again once there is another dot to it."""
        beat = lane.t // on.dot_s if lane.t == lane.t else None
        key = (lane.marked, beat, on.from_t, on.cell_s, on.width, height)
        held = self._traces.get(lane)
        if held is None or held[0] != key:
            held = self._traces[lane] = (key, trace(lane, on, height))
        return held[1]

"""The one axis of time that lanes and landing view share."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from monitor.screen.draw import Columns, Run
from monitor.screen.figures import Clock
from monitor.view import Lane

STEPS_S = (5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 10800, 21600, 43200, 86400)
LABEL_CELLS = 12
PAST = 2 / 3
COARSE_S = 20.0  # from this width of a column of dots on, minutes are drawn
SPAN_LEAST_S, SPAN_MOST_S = 60.0, 45 * 86400.0
REACH = 1.0 + 1e-9


@dataclass(frozen=True)
class Axis:
    """`width` cells of `cell_s` seconds from `from_t` on."""

    from_t: float
    cell_s: float
    width: int
    now_t: float

    @property
    def to_t(self) -> float:
        """Its right end."""
        return self.from_t + self.width * self.cell_s

    @property
    def dot_s(self) -> float:
        """Seconds a column of dots."""
        return 0.5 * self.cell_s

    def cell(self, t: float) -> int:
        """The cell column of a time; may lie outside."""
        if not math.isfinite(t):
            return -1
        return math.floor(max(min((t - self.from_t) / self.cell_s, 1e6), -1e6))

    def time(self, cell: int) -> float:
        """The time in the middle of a cell column."""
        return self.from_t + (cell + 0.5) * self.cell_s

    @property
    def now_cell(self) -> int:
        """The cell of the present."""
        return self.cell(self.now_t)


def axis(width: int, span_s: float, now_t: float, end_t: float | None) -> Axis:
    """The axis whose past part shows `span_s`; it moves on by whole cells only.

    `end_t` : the time at the end of the past part; None: the present.
    """
    past = max(round(width * PAST), 1)
    cell_s = span_s / past
    last = math.floor((now_t if end_t is None else end_t) / cell_s)
    return Axis((last + 1 - past) * cell_s, cell_s, width, now_t)


def columns(lane: Lane, on: Axis) -> tuple[Columns, Columns | None]:
    """A lane's trace on the axis: its seconds, or minutes where those are too many or too old.

    Returns the tank's readings, filtered; and for the faint trace those that are not the tank's,
    and the span of each minute; None without any.
    """
    trace = lane.trace
    split_t = trace.seconds.first_t
    if on.dot_s >= COARSE_S:
        split_t = trace.minutes.last_t + 30.0
    if split_t != split_t:
        split_t = on.from_t
    fine, faint = _seconds(lane, on, max(split_t, on.from_t))
    if on.from_t < split_t:
        mean, span = _minutes(lane, on, split_t)
        fine.fill_from(mean)
        if faint is not None:
            span.fill_from(faint)
        faint = span
    return fine, faint


def _minutes(lane: Lane, on: Axis, to_t: float) -> tuple[Columns, Columns]:
    """Mean of each minute up to `to_t`; and the span from its lowest to its highest."""
    t, low, mean, high, _, _ = lane.trace.minutes.between(on.from_t, min(to_t - 29.0, on.to_t))
    y = np.stack((low, high), axis=1).ravel()
    of = (on.from_t, on.dot_s, 2 * on.width, 121.0)
    return Columns(t, mean, *of), Columns(np.repeat(t, 2), y, *of)


def _seconds(lane: Lane, on: Axis, from_t: float) -> tuple[Columns, Columns | None]:
    """Seconds from `from_t` on: the tank's, filtered; and those that are not the tank's."""
    n, gap_s = 2 * on.width, 2.6
    t, value, smooth, good, _, _, _ = lane.trace.seconds.between(from_t, on.to_t)
    if len(t) > 2:
        gap_s = max(gap_s, 2.6 * float(np.diff(t[-64:]).min()))
    shown = np.where(np.isfinite(smooth), smooth, value)
    not_tank = good == 0
    faint: Columns | None = None
    if not_tank.any():
        faint = Columns(t, np.where(not_tank, value, np.nan), on.from_t, on.dot_s, n, gap_s)
        shown[not_tank] = np.nan
    return Columns(t, shown, on.from_t, on.dot_s, n, gap_s), faint


def labels(on: Axis, clock: Clock, margin: int, future: bool = True) -> list[Run]:
    """The axis' row: local times at round places, `now` at the present."""
    cells = [" "] * on.width
    step = next((s for s in STEPS_S if s >= LABEL_CELLS * on.cell_s), 86400)
    offset = clock.zero.utcoffset()
    shift = clock.zero.timestamp() + (offset.total_seconds() if offset else 0.0)
    first = math.ceil((on.from_t + shift) / step) * step - shift
    t = first
    now = on.now_cell
    while t < on.to_t:
        text = clock.second(t) if step < 60 else clock.minute(t)
        if step >= 86400:
            text = f"{clock.at(t):%d %b}"
        at = on.cell(t)
        clear = abs(at - now) > len(text) and (future or at < now)
        if clear and at >= 0 and at + len(text) + 1 <= on.width:
            cells[at : at + len(text) + 1] = "╵" + text
        t += step
    if 0 <= now <= on.width - 4:
        cells[now : now + 4] = "╵now"
    return [(" " * margin + "".join(cells), "faint")]

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

    Returns the tank's readings, filtered; and those that are not the tank's, None without any.
    """
    n = 2 * on.width
    times, values = [np.empty(0)], [np.empty(0)]
    gap_s = 2.6
    faint: Columns | None = None
    seconds_t = lane.trace.seconds.first_t
    coarse = on.dot_s >= COARSE_S
    if coarse or (seconds_t == seconds_t and on.from_t < seconds_t):
        t, low, _, high, _, _ = lane.trace.minutes.between(on.from_t, on.to_t)
        if len(t):
            old = np.ones(len(t), bool) if coarse else t + 30.0 <= seconds_t
            times.append(np.repeat(t[old], 2))
            values.append(np.stack((low[old], high[old]), axis=1).ravel())
            gap_s = 121.0
    if not coarse:
        t, value, smooth, good, _, _, _ = lane.trace.seconds.between(on.from_t, on.to_t)
        if len(t) > 2:
            gap_s = max(2.6, 2.6 * float(np.diff(t[-64:]).min()))
        shown = np.where(np.isfinite(smooth), smooth, value)
        not_tank = good == 0
        if not_tank.any():
            faint = Columns(t, np.where(not_tank, value, np.nan), on.from_t, on.dot_s, n, gap_s)
            shown[not_tank] = np.nan
        times.append(t)
        values.append(shown)
    y = np.concatenate(values)
    return Columns(np.concatenate(times), y, on.from_t, on.dot_s, n, gap_s), faint


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

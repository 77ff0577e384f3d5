"""Arrays into text: lines of looks, a canvas of braille dots, places on an axis.

Nothing here knows a terminal. A look is a word that a palette turns into colours and weights;
`front/back` is a look over the look of what lies behind it.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from rich.cells import cell_len, set_cell_size

from monitor.blocks import Floats


class Bit(NamedTuple):
    """A piece of a line and its look."""

    text: str
    look: str = ""


Line = tuple[Bit, ...]

# From the bottom to the top: what is drawn over what.
LAYERS = ("", "grid", "band", "past", "cone", "ghost", "raw", "rest", "faint", "doubtful", "trace")
_RANK = {look: i for i, look in enumerate(LAYERS)}
_WEIGHTS = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]], np.uint8)
_BRAILLE = 0x2800
_SPACE = ord(" ")


def fit(text: str, width: int) -> str:
    """The text in exactly so many cells, cut with `…` or padded."""
    if cell_len(text) <= width:
        return set_cell_size(text, width)
    return set_cell_size(text, width - 1) + "…" if width > 0 else ""


def width_of(line: Iterable[Bit]) -> int:
    """How many cells a line takes."""
    return sum(cell_len(bit.text) for bit in line)


def filled(line: Iterable[Bit], width: int, look: str = "") -> Line:
    """The line in exactly `width` cells."""
    kept: list[Bit] = []
    left = width
    for bit in line:
        wide = cell_len(bit.text)
        if wide > left:
            kept.append(Bit(fit(bit.text, left), bit.look))
            left = 0
            break
        if wide:
            kept.append(bit)
            left -= wide
    if left:
        kept.append(Bit(" " * left, look))
    return tuple(kept)


class Canvas:
    """Cells of 2 x 4 dots, layer over layer, and characters over them."""

    def __init__(self, width: int, height: int) -> None:
        self.width = width
        self.height = height
        self._bits = np.zeros((height, width), np.uint8)
        self._rank = np.zeros((height, width), np.uint8)
        self._back = np.zeros((height, width), np.uint8)
        self._chars = np.zeros((height, width), np.uint32)
        self._looks = list(LAYERS)

    def grid(self) -> NDArray[np.bool_]:
        """An empty layer, (4 height, 2 width) dots, True where one is to be."""
        return np.zeros((4 * self.height, 2 * self.width), np.bool_)

    def lay(self, dots: NDArray[np.bool_], look: str) -> None:
        """Put a layer of dots on: it hides in its cells what lies below it in LAYERS."""
        table = dots.reshape(self.height, 4, self.width, 2)
        weighed = table * _WEIGHTS[None, :, None, :]
        bits = weighed.sum(axis=(1, 3)).astype(np.uint8)
        rank = _RANK[look]
        over = (bits > 0) & (self._rank < rank)
        same = (bits > 0) & (self._rank == rank)
        self._bits[over] = bits[over]
        self._rank[over] = rank
        self._bits[same] |= bits[same]

    def shade(self, first_row: int, last_row: int, look: str, first: int = 0, last: int = -1) -> None:
        """Look of what lies behind these cells, rows and columns inclusive."""
        last = self.width - 1 if last < 0 else last
        top, bottom = max(first_row, 0), min(last_row, self.height - 1)
        if top <= bottom and first <= last:
            self._back[top : bottom + 1, max(first, 0) : last + 1] = self._number(look)

    def put(self, row: int, column: int, text: str, look: str, under: bool = False) -> None:
        """Characters (one cell each) over the dots; `under`: only where there are none."""
        if not 0 <= row < self.height:
            return
        number = self._number(look)
        for i, char in enumerate(text, column):
            if 0 <= i < self.width and not (under and (self._bits[row, i] or self._chars[row, i])):
                self._chars[row, i] = ord(char)
                self._rank[row, i] = number

    def _number(self, look: str) -> int:
        if look not in self._looks:
            self._looks.append(look)
        return self._looks.index(look)

    def lines(self) -> list[Line]:
        """The rows as they are to be printed."""
        dotted = np.where(self._bits > 0, self._bits.astype(np.uint32) + _BRAILLE, _SPACE)
        chars = np.where(self._chars > 0, self._chars, dotted).astype("<u4")
        looks = self._back.astype(np.int64) * 256 + self._rank
        return [self._line(row, look) for row, look in zip(chars, looks)]

    def _line(self, chars: NDArray[np.uint32], looks: NDArray[np.int64]) -> Line:
        text = chars.tobytes().decode("utf-32-le")
        cuts = [0, *(np.flatnonzero(np.diff(looks)) + 1).tolist(), len(text)]
        return tuple(
            Bit(text[a:b], self._name(int(looks[a]))) for a, b in zip(cuts, cuts[1:]) if a < b
        )

    def _name(self, look: int) -> str:
        front, back = self._looks[look % 256], self._looks[look // 256]
        return f"{front}/{back}" if back else front


class Axis(NamedTuple):
    """A straight axis: values from `low` to `high` on `n` dots."""

    low: float
    high: float
    n: int

    def place(self, values: Floats) -> NDArray[np.int64]:
        """Dots of these values, (m,); -1 or n for what lies outside, -1 for NaN."""
        with np.errstate(invalid="ignore", over="ignore"):
            at = np.floor((values - self.low) / (self.high - self.low) * self.n)
        at = np.where(np.isnan(at), -1.0, np.clip(at, -1.0, float(self.n)))
        return at.astype(np.int64)

    def upward(self, values: Floats) -> NDArray[np.int64]:
        """The same counted from the top, for a vertical axis; clipped to the axis."""
        with np.errstate(invalid="ignore", over="ignore"):
            at = (self.high - values) / (self.high - self.low) * (self.n - 1)
        return np.clip(np.nan_to_num(np.rint(at), nan=0.0), 0, self.n - 1).astype(np.int64)

    def holds(self, values: Floats) -> NDArray[np.bool_]:
        """Whether these values lie on it."""
        return np.asarray((values >= self.low) & (values <= self.high))


class Columns(NamedTuple):
    """Lowest and highest value in each dot column, (n,) each; NaN where there is none."""

    low: Floats
    high: Floats


def binned(time_s: Floats, low: Floats, high: Floats, axis: Axis, join_s: float) -> Columns:
    """What falls into each dot column, in order of time.

    A column between two readings at most `join_s` apart is filled; a longer silence stays a gap.
    """
    lows, highs = np.full(axis.n, np.nan), np.full(axis.n, np.nan)
    fine = ~(np.isnan(low) | np.isnan(high)) & (time_s >= axis.low) & (time_s < axis.high)
    time_s, low, high = time_s[fine], low[fine], high[fine]
    if not len(time_s):
        return Columns(lows, highs)
    at = axis.place(time_s)
    starts = np.concatenate(([0], np.flatnonzero(np.diff(at)) + 1))
    lows[at[starts]] = np.minimum.reduceat(low, starts)
    highs[at[starts]] = np.maximum.reduceat(high, starts)
    width_s = (axis.high - axis.low) / axis.n
    if width_s < join_s and len(time_s) > 1:
        _fill(lows, highs, time_s, 0.5 * (low + high), axis, join_s)
    return Columns(lows, highs)


def _fill(
    lows: Floats, highs: Floats, time_s: Floats, middle: Floats, axis: Axis, join_s: float
) -> None:
    centre = axis.low + (np.arange(axis.n) + 0.5) * (axis.high - axis.low) / axis.n
    after = np.clip(np.searchsorted(time_s, centre), 1, len(time_s) - 1)
    between = (centre > time_s[after - 1]) & (centre < time_s[after])
    near = between & (time_s[after] - time_s[after - 1] <= join_s) & np.isnan(lows)
    values = np.interp(centre[near], time_s, middle)
    lows[near] = values
    highs[near] = values


def line_dots(columns: Columns, vertical: Axis, dots: NDArray[np.bool_]) -> None:
    """Draw columns as one line: neighbours are joined, gaps are not."""
    there = ~np.isnan(columns.low)
    low, high = columns.low.copy(), columns.high.copy()
    both = there[1:] & there[:-1]
    low[1:] = np.where(both & (low[1:] > columns.high[:-1]), columns.high[:-1], low[1:])
    high[1:] = np.where(both & (high[1:] < columns.low[:-1]), columns.low[:-1], high[1:])
    there &= (high >= vertical.low) & (low <= vertical.high)
    top, bottom = vertical.upward(high), vertical.upward(low)
    rows = np.arange(vertical.n)[:, None]
    dots |= (rows >= top) & (rows <= bottom) & there


def nice_step(span: float, most: int) -> float:
    """A step of 1, 2 or 5 times a power of ten that divides `span` into at most `most`."""
    raw = span / max(most, 1)
    if not (raw > 0 and math.isfinite(raw)):
        return 1.0
    power = 10.0 ** math.floor(math.log10(raw))
    return next(power * m for m in (1.0, 2.0, 5.0, 10.0) if power * m >= raw * (1 - 1e-9))


TIME_STEPS = (1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 10800, 21600, 43200)


def time_step(span_s: float, most: int) -> float:
    """A step of whole seconds, minutes or hours that divides `span_s` into at most `most`."""
    raw = span_s / max(most, 1)
    return float(next((s for s in TIME_STEPS if s >= raw), 86400 * max(1, math.ceil(raw / 86400))))

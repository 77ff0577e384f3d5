"""Arrays into characters: a pure canvas of braille dots, marks and words, with true gaps.

A canvas is `height` x `width` cells; a cell holds 4 x 2 dots, so a curve has 4 height rows and
2 width columns to be drawn in. Inks and papers are small numbers; what colour they have is not
known here.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from monitor.blocks import Floats

Bools = NDArray[np.bool_]
Run = tuple[str, str]  # text, style

_BITS = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]], np.uint16)
_BLANK = 0x2800


class Columns:
    """Readings gathered into columns of dots: lowest and highest of each, NaN where none.

    low, high : (n,) float64
    joined : (n,) bool, whether a column goes on from the one before it
    """

    def __init__(
        self, t: Floats, y: Floats, from_t: float, dt: float, n: int, gap_s: float
    ) -> None:
        """`dt` s a column; readings further apart than `gap_s` are not joined."""
        self.low = np.full(n, np.nan)
        self.high = np.full(n, np.nan)
        self.joined = np.zeros(n, bool)
        keep = np.isfinite(y)
        t, y = t[keep], y[keep]
        column = np.floor((t - from_t) / dt).astype(np.int64)
        inside = (column >= 0) & (column < n)
        t, y, column = t[inside], y[inside], column[inside]
        if not len(t):
            return
        starts = np.concatenate(([0], np.flatnonzero(np.diff(column)) + 1))
        at = column[starts]
        self.low[at] = np.minimum.reduceat(y, starts)
        self.high[at] = np.maximum.reduceat(y, starts)
        last = np.concatenate((starts[1:], [len(t)])) - 1
        near = t[starts[1:]] - t[last[:-1]] <= max(gap_s, 1.01 * dt)
        self.joined[at[1:]] = near
        self._bridge(at, near, y[last[:-1]], y[starts[1:]])

    def fill_from(self, other: Columns) -> None:
        """Take the other's columns where there are none; they join where both sides are filled."""
        empty = np.isnan(self.low)
        taken = empty & np.isfinite(other.low)
        self.low[taken], self.high[taken] = other.low[taken], other.high[taken]
        self.joined[taken] = other.joined[taken]
        border = np.flatnonzero(~taken[1:] & taken[:-1] & np.isfinite(self.low[1:])) + 1
        self.joined[border] = True

    def _bridge(self, at: NDArray[np.int64], near: Bools, left: Floats, right: Floats) -> None:
        """Fill the columns between two that belong together, on a straight line."""
        between = np.arange(len(self.low))
        pair = np.searchsorted(at, between, side="right") - 1
        empty = np.isnan(self.low) & (pair >= 0) & (pair < len(at) - 1)
        empty[empty] = near[pair[empty]]
        if not empty.any():
            return
        i = pair[empty]
        share = (between[empty] - at[i]) / (at[i + 1] - at[i])
        line = left[i] + share * (right[i] - left[i])
        self.low[empty] = self.high[empty] = line
        self.joined[empty] = True


class Canvas:
    """Cells to draw in; values lie between `low` (bottom) and `high` (top)."""

    def __init__(self, width: int, height: int, low: float, high: float) -> None:
        self.width, self.height = width, height
        self.low, self.high = low, high
        self.chars = np.full((height, width), ord(" "), np.uint32)
        self.ink = np.zeros((height, width), np.int8)
        self.paper = np.zeros((height, width), np.int8)
        self._dots = np.zeros((height, width), np.uint16)

    def row_of(self, value: float) -> int | None:
        """The cell row of a value; None where it is off the scale."""
        if not self.low <= value <= self.high:
            return None
        share = (self.high - value) / ((self.high - self.low) or 1.0)
        return min(int(share * self.height), self.height - 1)

    def dot_rows(self, values: Floats) -> Floats:
        """Dot rows of values, (n,) float; beyond the scale they lie outside, NaN stays NaN."""
        span = (self.high - self.low) or 1.0
        rows = (self.high - values) / span * (4 * self.height) - 0.5
        return np.clip(np.rint(rows), -2.0, 4.0 * self.height + 1.0)

    def curve(self, columns: Columns, ink: int) -> None:
        """Draw readings: each column's span, and its join to the one before."""
        top, bottom = self.dot_rows(columns.high), self.dot_rows(columns.low)
        before_top = np.concatenate(([np.nan], top[:-1]))
        before_bottom = np.concatenate(([np.nan], bottom[:-1]))
        join = columns.joined & np.isfinite(before_top)
        with np.errstate(invalid="ignore"):
            down = join & (top > before_bottom)
            up = join & (bottom < before_top)
        top = np.where(down, before_bottom + 1.0, top)
        bottom = np.where(up, before_top - 1.0, bottom)
        self.fill(top, bottom, ink, alone=True)

    def fill(
        self, top: Floats, bottom: Floats, ink: int, every: int = 1, alone: bool = False
    ) -> None:
        """Set the dots from `top` to `bottom`, (2 width,) dot rows; `every`: only some of them."""
        rows = np.arange(4 * self.height)[:, None]
        with np.errstate(invalid="ignore"):
            dots = (rows >= np.minimum(top, bottom)) & (rows <= np.maximum(top, bottom))
        if every > 1:
            columns = np.arange(2 * self.width)[None, :]
            dots &= (rows + columns * 2) % every == 0
        self.dots(dots, ink, alone)

    def points(self, t: Floats, y: Floats, from_t: float, dt: float, ink: int) -> None:
        """Single dots, unjoined."""
        column = np.floor((t - from_t) / dt)
        span = (self.high - self.low) or 1.0
        with np.errstate(invalid="ignore"):
            row = np.rint((self.high - y) / span * 4 * self.height - 0.5)
            inside = np.isfinite(y) & (column >= 0) & (column < 2 * self.width)
            inside &= (row >= 0) & (row < 4 * self.height)
        dots = np.zeros((4 * self.height, 2 * self.width), bool)
        dots[row[inside].astype(np.int64), column[inside].astype(np.int64)] = True
        self.dots(dots, ink)

    def dots(self, dots: Bools, ink: int, alone: bool = False) -> None:
        """Add dots, (4 height, 2 width); later inks win a shared cell, or have it `alone`."""
        cells = dots.reshape(self.height, 4, self.width, 2)
        bits = np.einsum("hrwc,rc->hw", cells, _BITS).astype(np.uint16)
        there = bits > 0
        if alone:
            self._dots[there] = 0
        self._dots |= bits
        self.chars[there] = _BLANK + self._dots[there]
        self.ink[there] = ink

    def band(self, low: float, high: float, paper: int, edge_ink: int, edge: str = "") -> None:
        """Shade the rows between two values; with `edge`, draw their bounds too."""
        edges = np.linspace(self.high, self.low, self.height + 1)
        middle = 0.5 * (edges[1:] + edges[:-1])
        self.paper[(middle >= low) & (middle <= high)] = paper
        for bound in (low, high):
            row = self.row_of(bound)
            if row is not None and edge:
                blank = self.chars[row] == ord(" ")
                self.chars[row, blank] = ord(edge)
                self.ink[row, blank] = edge_ink

    def upright(self, column: int, ink: int, char: str, over: bool = False) -> None:
        """A vertical rule through one cell column; over what is drawn only if asked."""
        if not 0 <= column < self.width:
            return
        cells = np.full(self.height, True) if over else self.chars[:, column] == ord(" ")
        self.chars[cells, column] = ord(char)
        self.ink[cells, column] = ink

    def level(self, row: int | None, first: int, last: int, ink: int, char: str) -> None:
        """A horizontal rule over blank cells from column `first` to `last`."""
        if row is None:
            return
        first, last = max(first, 0), min(last, self.width - 1)
        cells = np.arange(first, last + 1)
        cells = cells[self.chars[row, first : last + 1] == ord(" ")]
        self.chars[row, cells] = ord(char)
        self.ink[row, cells] = ink

    def recolour(self, first: int, last: int, ink: int, to: int) -> None:
        """What has `ink` between two columns gets another."""
        part = self.ink[:, first : last + 1]
        part[part == ink] = to

    def put(self, row: int, column: int, text: str, ink: int) -> None:
        """Write text of narrow characters over what is there; what does not fit is cut."""
        if not 0 <= row < self.height:
            return
        text = text[max(-column, 0) : max(self.width - column, 0)]
        column = max(column, 0)
        for i, char in enumerate(text):
            self.chars[row, column + i] = ord(char)
            self.ink[row, column + i] = ink

    def runs(self, row: int, names: tuple[str, ...], papers: tuple[str, ...]) -> list[Run]:
        """One row as runs of text of one style: an ink's name followed by a paper's."""
        key = self.ink[row].astype(np.int16) * 16 + self.paper[row]
        cuts = [0, *(np.flatnonzero(np.diff(key)) + 1).tolist(), self.width]
        line = self.chars[row].tobytes().decode("utf-32-le")
        return [
            (line[a:b], names[int(key[a]) >> 4] + papers[int(key[a]) & 15])
            for a, b in pairwise(cuts)
            if b > a
        ]

    def text(self) -> str:
        """The whole canvas without styles."""
        return "\n".join(row.tobytes().decode("utf-32-le") for row in self.chars)


def nice_step(span: float, most: int) -> float:
    """The smallest 1, 2 or 5 times a power of ten that cuts `span` into at most `most` steps."""
    raw = span / max(most, 1)
    power = 10.0 ** np.floor(np.log10(raw))
    for factor in (1.0, 2.0, 5.0):
        if factor * power >= raw * (1.0 - 1e-9):
            return float(factor * power)
    return float(10.0 * power)


def nice_bounds(low: float, high: float, least: float) -> tuple[float, float]:
    """Bounds that hold [low, high], at least `least` apart, on round figures so that they keep."""
    middle, span = 0.5 * (low + high), max(high - low, least, 1e-12)
    step = nice_step(span, 6)
    bottom = np.floor((middle - 0.52 * span) / step) * step
    top = np.ceil((middle + 0.52 * span) / step) * step
    return min(float(bottom), low), max(float(top), high)


def strip(
    width: int,
    scale: tuple[float, float],
    aim: tuple[float, float],
    value: float,
    u95: float,
    landing: float = float("nan"),
    hollow: bool = False,
) -> str:
    """A value with its doubt on a line that shows the aim to scale.

    `├` and `┤` bound the aim; the doubt is a bar, drawn through a bound as `┿` where it reaches
    across it: inside surely, inside barely and cannot say differ in shape.
    """
    low, high = scale

    def at(x: float) -> float:
        return min(max((x - low) / (high - low) * width, -1.0), width + 1.0)

    bounds = [min(max(int(at(bound)), 0), width - 1) for bound in aim]
    cells = ["·" if bounds[0] < i < bounds[1] else " " for i in range(width)]
    cells[bounds[0]], cells[bounds[1]] = "├", "┤"
    if np.isfinite(landing) and 0 <= at(landing) < width and int(at(landing)) not in bounds:
        cells[int(at(landing))] = "┊"
    if not np.isfinite(value):
        return "".join(cells)
    half = u95 if np.isfinite(u95) else 0.0
    left, right = at(value - half), at(value + half)
    for i in range(max(int(left), 0), min(int(right) + 1, width)):
        covers_left, covers_right = left <= i + 0.25, right >= i + 0.75
        if covers_left or covers_right:
            bar = "━" if covers_left and covers_right else "╸" if covers_left else "╺"
            cells[i] = "┿" if i in bounds else bar
    mark = "◇" if hollow else "◆"
    place = at(value)
    cells[int(min(max(place, 0), width - 1))] = "◀" if place < 0 else "▶" if place > width else mark
    return "".join(cells)

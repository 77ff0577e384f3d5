"""Rows of text to numbers: one grammar, two lanes.

`slow` is the definition: a strict regular expression and float() a line. `fast` takes many lines
at once by NumPy and agrees with it to the bit. Lines that have their digits, points and commas in
the same places are one shape: laid over its template, all that is not right shows, and the digits
times their powers of ten are whole numbers. Those are exact (below 2^53), and so are the powers of
ten, so whole / 10^decimals is the correctly rounded value that float(text) gives.

A log's lines mostly go on in one shape for thousands of rows; those are taken as they stand.
Where shapes mix, lines are gathered by their length. What is left goes to the slow lane.
"""

from __future__ import annotations

import functools
import re
from typing import NamedTuple

import numpy as np

from monitor.blocks import NAN, Floats

ROW = re.compile(
    rb"(\d{1,9}(?:\.\d{1,6})?),(\d{1,12}(?:\.\d{1,9})?)(?:,(-?\d{1,3}(?:\.\d{1,6})?)?)?"
)
FEW = 16  # lines of one shape below which the slow lane is the faster one
_FEW_MIXED = 64  # and of several
_DIGITS_MOST = 15  # of one figure: below 2^53
_TILE = 1 << 17  # bytes that a template covers
_TRIAL = 1024  # lines tried first: where shapes change often, more would be in vain
_MIXED = 1 << 15  # bytes taken at a time where shapes mix
_ROUNDS = 12  # shapes looked for in these
_SAME = bytes.maketrans(b"123456789", b"000000000")
_MOST = bytes(9 if byte == 0x30 else 0 for byte in range(256))


class Rows(NamedTuple):
    """Values of lines; where `good` is False the line is no row."""

    good: np.ndarray
    time_s: Floats
    period_us: Floats
    temp_c: Floats


def slow(line: bytes) -> tuple[float, float, float] | None:
    """Time, period and temperature (NaN = none) of one line, None if it is no row."""
    found = ROW.fullmatch(line)
    if found is None:
        return None
    time_s, period_us, temp_c = found.groups()
    return float(time_s), float(period_us), float(temp_c) if temp_c else NAN


def fast(text: bytes, temperature: bool = True) -> Rows:
    """Rows of whole lines, up to the last LF; without `temperature`, of two columns only."""
    last = text.rfind(b"\n") + 1
    data = np.frombuffer(text, np.uint8, last)
    commas = 2 if temperature else 1
    good: list[np.ndarray] = []
    values: list[Floats] = []
    at = 0
    while at < last:
        shape = _shape_of(text[at : text.index(b"\n", at) + 1], commas)
        alike = shape.alike(data[at:]) if shape else _NONE
        if shape and len(alike) >= FEW:
            good.append(np.ones(len(alike), bool))
            values.append(shape.values(alike))
            at += alike.size
        else:
            end = (text.rfind(b"\n", at, at + _MIXED) + 1) or text.index(b"\n", at) + 1
            mixed = _mixed(text[at:end], commas)
            good.append(mixed[0])
            values.append(mixed[1])
            at = end
    if len(good) == 1:
        return Rows(good[0], *values[0])
    return Rows(np.concatenate(good), *np.concatenate(values, axis=1))


class _Shape:
    """Lines with digits where this one has them, and all else the same."""

    def __init__(self, line: bytes, figures: list[tuple[int, int]]) -> None:
        self.size = len(line)
        self.weights = np.zeros((3, self.size))
        self.scales = np.ones((3, 1))
        self.missing = [i for i, (start, end) in enumerate(figures) if start == end]
        for i, (start, end) in enumerate(figures):
            places = [p for p in range(start, end) if line[p] == 0x30]
            self.weights[i, places] = [10.0**power for power in reversed(range(len(places)))]
            decimals = line[start:end].partition(b".")[2]
            self.scales[i] = (-1.0 if line[start] == 0x2D else 1.0) * 10.0 ** len(decimals)
        lines = _TILE // self.size
        self.template = np.frombuffer(line * lines, np.uint8)
        self.most = np.frombuffer(line.translate(_MOST) * lines, np.uint8)

    def alike(self, data: np.ndarray) -> np.ndarray:
        """Digits of the lines of this shape at the head of `data`, (n, size), 0 where none is."""
        for lines in (_TRIAL, len(self.template) // self.size):
            size = min(len(data) // self.size, lines) * self.size
            digits = data[:size] ^ self.template[:size]
            wrong = digits > self.most[:size]
            first = int(wrong.argmax()) if size else 0
            if size and wrong[first]:
                digits = digits[: first // self.size * self.size]
                break
        return digits.reshape(-1, self.size)

    def held_to(self, lines: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Digits of lines of this length, (n, size), and which of them are of this shape."""
        digits = lines ^ self.template[: lines.size].reshape(lines.shape)
        right = digits <= self.most[: lines.size].reshape(lines.shape)
        return digits, np.asarray(right.all(axis=1))

    def values(self, digits: np.ndarray) -> Floats:
        """Time, period and temperature of these lines, (3, n)."""
        figures = np.asarray(self.weights @ digits.astype(np.float64).T)
        figures /= self.scales
        figures[self.missing] = NAN
        return figures


_NONE = np.empty((0, 1), np.uint8)


def _shape_of(line: bytes, commas: int) -> _Shape | None:
    """The shape of this line (with its LF), None if it is no row or no figure for this lane."""
    return _shape(line.translate(_SAME), commas) if len(line) < 64 else None


@functools.lru_cache(maxsize=16)
def _shape(line: bytes, commas: int) -> _Shape | None:
    found = ROW.fullmatch(line, 0, len(line) - 1)
    if found is None or line.count(b",") > commas:
        return None
    if any(len(figure or b"") > _DIGITS_MOST for figure in found.groups()):
        return None
    spans = [found.span(i) for i in (1, 2, 3)]
    return _Shape(line, [(max(start, 0), max(end, 0)) for start, end in spans])


def _mixed(text: bytes, commas: int) -> tuple[np.ndarray, Floats]:
    """The lines of this text, shape by shape, the commonest length first: `good` and values."""
    data = np.frombuffer(text, np.uint8)
    ends = np.flatnonzero(data == 10) + 1
    starts = np.concatenate(([0], ends[:-1]))
    sizes = np.minimum(ends - starts, 64)
    good, values = np.zeros(len(ends), bool), np.full((3, len(ends)), NAN)
    left = np.ones(len(ends), bool)
    slowly: list[int] = []
    for _ in range(_ROUNDS):
        if left.sum() < _FEW_MIXED:
            break
        same = np.flatnonzero(left & (sizes == np.bincount(sizes[left]).argmax()))
        lead = int(same[0])
        shape = _shape_of(text[starts[lead] : ends[lead]], commas)
        left[lead] = False
        if shape is None:
            slowly.append(lead)
            continue
        digits, ok = shape.held_to(data[starts[same][:, None] + np.arange(shape.size)])
        good[same[ok]] = True
        values[:, same[ok]] = shape.values(digits[ok])
        left[same[ok]] = False
    for i in slowly + np.flatnonzero(left).tolist():
        line = text[starts[i] : ends[i] - 1]
        row = slow(line) if line.count(b",") <= commas else None
        if row is not None:
            good[i] = True
            values[:, i] = row
    return good, values

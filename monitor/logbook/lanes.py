"""Rows of text to numbers: one grammar, two lanes.

`slow` is the definition: a strict regular expression and float() a line. `fast` takes many lines
at once by NumPy and agrees with it to the bit: digits are turned into whole numbers eight at a
time, and whole / 10^decimals is the correctly rounded value that float(text) gives, as long as
both are exact (below 2^53 and up to 10^22). Lines it does not take go to the slow lane.
"""

from __future__ import annotations

import re
from typing import NamedTuple

import numpy as np

from monitor.blocks import NAN, Floats

ROW = re.compile(
    rb"(\d{1,9}(?:\.\d{1,6})?),(\d{1,12}(?:\.\d{1,9})?)(?:,(-?\d{1,3}(?:\.\d{1,6})?)?)?"
)
FEW = 48  # lines below which the slow lane is the faster one
_ROUNDS = 6  # patterns of decimals tried on one stretch
_PAD = 16
_COMMAS = np.array([44, 44, 10], np.uint8)  # of a row of three columns
_ZEROS = np.uint64(0x3030303030303030)
_ABOVE_9 = np.uint64(0x7676767676767676)
_HIGH = np.uint64(0x8080808080808080)
_STEPS = (
    (np.uint64(2561), np.uint64(8), np.uint64(0x00FF00FF00FF00FF)),
    (np.uint64(6553601), np.uint64(16), np.uint64(0x0000FFFF0000FFFF)),
    (np.uint64(42949672960001), np.uint64(32), np.uint64(0x00000000FFFFFFFF)),
)


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
    """Rows of whole lines (each ends with LF); without `temperature`, of two columns only."""
    padded = np.frombuffer(b" " * _PAD + text, np.uint8)
    words = np.ndarray((len(padded) - 7,), np.uint64, padded, 0, (1,))
    edges = _edges(padded)
    n = len(edges[0])
    good = np.zeros(n, bool)
    values = np.full((3, n), NAN)
    left = np.arange(n)
    slowly: list[int] = []
    for _ in range(_ROUNDS):
        edges_left = edges if len(left) == n else [edge[left] for edge in edges]
        taken, figures = _same_shape(padded, words, edges_left)
        if taken.all():
            good[left] = True
            values[:, left] = figures
            left = left[:0]
        else:
            good[left[taken]] = True
            values[:, left[taken]] = figures[:, taken]
            if not taken[0]:  # a spoilt line must not lead another round
                slowly.append(int(left[0]))
                taken[0] = True
            left = left[~taken]
        if len(left) < FEW:
            break
    starts, ends = edges[0], edges[3]
    for i in slowly + left.tolist():
        row = slow(text[starts[i] - _PAD : ends[i] - _PAD])
        if row is not None:
            good[i] = True
            values[:, i] = row
    if not temperature:
        good &= edges[2] == ends
    return Rows(good, *values)


def _edges(padded: np.ndarray) -> list[np.ndarray]:
    """Start, first comma, second comma (the end where there is none) and end of each line."""
    marks = np.flatnonzero(padded < 45)[_PAD:]  # the padding's blanks are the first of them
    kinds = padded[marks]
    if len(marks) % 3 == 0 and (kinds.reshape(-1, 3) == _COMMAS).all():
        first, second, ends = marks.reshape(-1, 3).T
        return [_starts(ends), first, second, ends]
    ends = marks[kinds == 10]
    starts = _starts(ends)
    commas = np.append(marks[kinds == 44], len(padded) - 1)
    at = np.searchsorted(commas, starts)
    first = np.minimum(commas[at], ends)
    second = np.minimum(commas[np.minimum(at + 1, len(commas) - 1)], ends)
    return [starts, first, second, ends]


def _starts(ends: np.ndarray) -> np.ndarray:
    starts = np.empty_like(ends)
    starts[0], starts[1:] = _PAD, ends[:-1] + 1
    return starts


def _same_shape(
    padded: np.ndarray, words: np.ndarray, edges: list[np.ndarray]
) -> tuple[np.ndarray, Floats]:
    """Figures, (3, n), of the lines that have as many decimals as the first, and which those are.

    What lies between the edges of a figure is looked at byte by byte, so a line with anything
    else in it is never taken.
    """
    start, first, second, end = edges
    lead = [int(edge[0]) for edge in edges]
    figures = np.full((3, len(start)), NAN)
    figures[0], ok = _figures(padded, words, start, first, _decimals(padded, *lead[:2]), 6, 8)
    figures[1], good = _figures(
        padded, words, first + 1, second, _decimals(padded, lead[1] + 1, lead[2]), 6, 8
    )
    ok &= good
    if lead[2] + 1 < lead[3]:
        decimals = _decimals(padded, lead[2] + 1, lead[3])
        figures[2], good = _figures(padded, words, second + 1, end, decimals, 6, 3)
        ok &= good
    else:
        ok &= second + 1 >= end
    return ok, figures


def _decimals(padded: np.ndarray, start: int, end: int) -> int:
    text = padded[start:end].tobytes()
    dot = text.rfind(b".")
    return 0 if dot < 0 else len(text) - dot - 1


def _figures(
    padded: np.ndarray,
    words: np.ndarray,
    start: np.ndarray,
    end: np.ndarray,
    decimals: int,
    decimals_most: int,
    whole_most: int,
) -> tuple[Floats, np.ndarray]:
    """Values of the figures between start and end, and which of them have this form.

    At most 8 digits before the point and 6 behind it: 14 digits are exact.
    """
    if decimals > decimals_most:
        return np.zeros(len(start)), np.zeros(len(start), bool)
    size = end - start
    most = int(size.max(initial=0))
    if most <= 8 and decimals:
        word = words[end - 8]
        ok = (size > decimals + 1) & (size <= whole_most + decimals + 1)
        ok &= (word >> np.uint64(8 * (7 - decimals))) & np.uint64(0xFF) == 46
        behind = np.uint64(0xFFFFFFFFFFFFFFFF << (8 * (8 - decimals)) & 0xFFFFFFFFFFFFFFFF)
        word = (word & behind) | ((word << np.uint64(8)) & ~behind)
        number, good = _number(word, 9 - size)
        ok &= good
        return number / 10.0**decimals, ok
    point = end - decimals - 1 if decimals else end
    size = point - start
    ok = (size >= 1) & (size <= whole_most)
    number, good = _number(words[point - 8], 8 - size)
    ok &= good
    if decimals:
        ok &= padded[point] == 46
        behind_number, good = _number(words[end - 8], 8 - decimals)
        ok &= good
        number = number * np.uint64(10**decimals) + behind_number
        return number / 10.0**decimals, ok
    return number.astype(np.float64), ok


def _number(word: np.ndarray, drop: np.ndarray | int) -> tuple[np.ndarray, np.ndarray]:
    """The number that eight bytes spell, the first `drop` left aside; and which are digits."""
    bits = np.clip(8 * drop, 0, 56).astype(np.uint64) if not isinstance(drop, int) else None
    shift = np.uint64(8 * drop) if bits is None else bits
    word = word ^ _ZEROS
    word >>= shift
    word <<= shift
    good = ((word + _ABOVE_9) | word) & _HIGH == 0
    for factor, by, mask in _STEPS:
        word *= factor
        word >>= by
        word &= mask
    return word, good

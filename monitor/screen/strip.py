"""Salinity as a mark whose width is its doubt, on a strip that shows the aim to scale.

`╎` the edges of the aim, `━` the doubt (u95), `●` the value, `◇` where it is expected to land,
`◂` `▸` beyond the strip. "Inside, surely", "inside, barely" and "cannot say" differ in shape.
"""

from __future__ import annotations

import math

from monitor.screen.draw import Bit, Line

AROUND = 0.5  # of the aim's width, shown on either side of it


def strip(
    width: int,
    aim: tuple[float, float] | None,
    value: float,
    u95: float,
    landing: float = math.nan,
    look: str = "value",
) -> Line:
    """One line of `width` cells; values in one unit, NaN where there is none."""
    if aim is None or width < 5:
        return (Bit(" " * width),)
    low, high = aim
    margin = AROUND * (high - low)
    chars = [" "] * width
    looks = ["band"] * width

    def cell(at: float) -> int:
        share = (at - low + margin) / (high - low + 2 * margin)
        return math.floor(min(max(share, -1.0), 2.0) * width)

    edges = cell(low), min(cell(high), width - 1)
    for i in range(edges[0] + 1, edges[1]):
        chars[i] = "·"
    for i in edges:
        chars[i] = "╎"
    if math.isfinite(value):
        _mark(chars, looks, cell, value, u95, look, edges)
    if math.isfinite(landing) and cell(landing) != cell(value if math.isfinite(value) else -1e9):
        _set(chars, looks, cell(landing), "◇", "landing")
    return _bits(chars, looks)


def _mark(chars, looks, cell, value, u95, look, edges) -> None:  # type: ignore[no-untyped-def]
    if math.isfinite(u95) and u95 > 0:
        for i in range(max(cell(value - u95), 0), min(cell(value + u95), len(chars) - 1) + 1):
            chars[i] = "┿" if i in edges else "━"
            looks[i] = look
    at = cell(value)
    if at < 0:
        _set(chars, looks, 0, "◂", look)
    elif at >= len(chars):
        _set(chars, looks, len(chars) - 1, "▸", look)
    else:
        _set(chars, looks, at, "●", look)


def _set(chars: list[str], looks: list[str], i: int, char: str, look: str) -> None:
    i = min(max(i, 0), len(chars) - 1)
    chars[i], looks[i] = char, look


def _bits(chars: list[str], looks: list[str]) -> Line:
    bits: list[Bit] = []
    for char, look in zip(chars, looks):
        if bits and bits[-1].look == look:
            bits[-1] = Bit(bits[-1].text + char, look)
        else:
            bits.append(Bit(char, look))
    return tuple(bits)

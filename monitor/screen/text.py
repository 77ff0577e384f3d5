"""Text from outside, made safe and cut to a number of cells; runs of text cut to a row."""

from __future__ import annotations

from rich.cells import cell_len, set_cell_size

from monitor.printable import printable
from monitor.screen.draw import Run


def fit(text: str, width: int) -> str:
    """Text safe to print, in exactly `width` cells; what was cut off shows as `…`."""
    if width <= 0:
        return ""
    safe = printable(text, 400)
    if cell_len(safe) > width:
        return set_cell_size(safe, width - 1) + "…"
    return set_cell_size(safe, width)


def filled(text: str, width: int, style: str) -> list[Run]:
    """Text in exactly `width` cells, of which only what is written has the style."""
    fitted = fit(text, width)
    said = fitted.rstrip()
    return [(said, style), (fitted[len(said) :], "")]


def row(runs: list[Run], width: int) -> list[Run]:
    """Runs cut or filled to exactly `width` cells."""
    kept: list[Run] = []
    left = width
    for text, style in runs:
        size = cell_len(text)
        if size > left:
            text, size = set_cell_size(text, left), left
        if text:
            kept.append((text, style))
        left -= size
        if left <= 0:
            break
    if left > 0:
        kept.append((" " * left, ""))
    return kept


def plain(runs: list[Run]) -> str:
    """The runs' text alone."""
    return "".join(text for text, _ in runs)


def wrapped(text: str, width: int, most: int) -> list[str]:
    """Text in at most `most` lines of at most `width` cells, broken at blanks."""
    lines: list[str] = []
    line = ""
    for word in printable(text, 1000).split(" "):
        longer = f"{line} {word}" if line else word
        if cell_len(longer) <= width:
            line = longer
            continue
        if line:
            lines.append(line)
        line = word if cell_len(word) <= width else fit(word, width)
    lines.append(line)
    if len(lines) > most:
        lines = lines[:most]
        lines[-1] = fit(lines[-1] + " …", width).rstrip()
    return lines

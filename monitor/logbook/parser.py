"""Log text in any pieces to Blocks and Events, in the order of the file. No file is touched here.

Rules:
- The same text in other pieces gives the same rows and events, though not the same Blocks.
- What is no row and no event is dropped and counted by what is wrong with it; nothing stops it
  but a header that is no log's.
- A last line without LF is torn, however well it reads; `finish` counts it.
"""

from __future__ import annotations

import re
from collections import Counter

import numpy as np

from monitor.blocks import NAN, Block, Event
from monitor.logbook import lanes
from monitor.logbook.codec import (
    LINE_MOST,
    EventError,
    Header,
    HeaderError,
    check_first,
    event_of,
    header_of,
)

Item = Block | Event
_HEADER_MOST = 200  # comment lines before the columns
_WITHOUT = ["time_s", "period_us"]
_STANDARD = ([*_WITHOUT, "temp_c"], _WITHOUT)
_LONG = "line over 1 MB"
_LF = 10
_FAST = 20 * lanes.FEW  # bytes


class Parser:
    """Parses one file of a log.

    header : what its head says, None until that was read
    dropped : lines that were no row and no event, by what is wrong with them
    """

    def __init__(self) -> None:
        self.header: Header | None = None
        self.dropped: Counter[str] = Counter()
        self.lines = 0
        self._head: list[str] = []
        self._columns: list[str] | None = None
        self._tail = b""
        self._skipping = False  # the rest of a line that is too long
        self._last_t = -1.0

    def feed(self, data: bytes) -> list[Item]:
        """Rows and events that these further bytes complete.

        Raises HeaderError if this is no log.
        """
        cut = data.rfind(b"\n")
        if cut < 0:
            self._keep(self._tail + data)
            return []
        text = self._tail + data[: cut + 1]
        if self._skipping:
            text = text[text.index(b"\n") + 1 :]
            self._skipping = False
        self._tail = b""
        self._keep(data[cut + 1 :])
        items: list[Item] = []
        if self._columns is None:
            text = self._read_head(text, items)
        self._read(text, items)
        return items

    def finish(self) -> list[Item]:
        """The file is at its end."""
        if self._tail and not self._skipping:
            self.dropped["torn"] += 1
        self._tail = b""
        if self.header is None and self._head:
            self.header = header_of(self._head)
        return []

    def _keep(self, tail: bytes) -> None:
        if len(tail) > LINE_MOST:
            if self._columns is None and not self._head:
                check_first("")  # no log begins with such a line
            if not self._skipping:
                self.dropped[_LONG] += 1
                self.lines += 1
            self._skipping = True
            tail = b""
        self._tail = tail

    def _read_head(self, text: bytes, items: list[Item]) -> bytes:
        """Take the header's lines off the text, up to the columns' names."""
        at = 0
        while at < len(text):
            end = text.index(b"\n", at)
            line = text[at:end]
            at = end + 1
            if self._head and (line.startswith(b"#!") or len(line) > LINE_MOST):
                self._comment(line, items)
                continue
            self.lines += 1
            if self._head and not line.startswith(b"#"):
                self.header = header_of(self._head)
                self._columns = _columns(line)
                break
            self._head.append(line[:1000].decode("utf-8", "replace"))
            if len(self._head) == 1:
                check_first(self._head[0])
            if len(self._head) > _HEADER_MOST:
                raise HeaderError("no line of column names; expected time_s,period_us,temp_c")
        return text[at:]

    def _read(self, text: bytes, items: list[Item]) -> None:
        at = 0
        while at < len(text):
            if text.startswith(b"#", at):
                end = text.index(b"\n", at)
                self._comment(text[at:end], items)
                at = end + 1
                continue
            mark = text.find(b"#", at)
            while mark > 0 and text[mark - 1] != _LF:  # inside a spoilt line
                mark = text.find(b"#", mark + 1)
            end = len(text) if mark < 0 else mark
            self._rows(text[at:end], items)
            at = end

    def _comment(self, line: bytes, items: list[Item]) -> None:
        self.lines += 1
        if len(line) > LINE_MOST:
            self.dropped[_LONG] += 1
            return
        if not line.startswith(b"#!"):
            return
        try:
            items.append(event_of(line.decode("utf-8")))
        except (EventError, UnicodeDecodeError):
            self.dropped["malformed event"] += 1

    def _rows(self, text: bytes, items: list[Item]) -> None:
        if self._columns in _STANDARD and len(text) >= _FAST:
            rows = lanes.fast(text, self._columns != _WITHOUT)
            self.lines += len(rows.good)
            table: tuple[np.ndarray, ...] = rows[1:]
            if not rows.good.all():
                lines = text.split(b"\n")
                for i in np.flatnonzero(~rows.good).tolist():
                    self.dropped[self._wrong(lines[i])] += 1
                table = tuple(column[rows.good] for column in table)
        else:
            table = tuple(self._slowly(text))
        time_s = table[0]
        if not len(time_s):
            return
        if time_s[0] < self._last_t or (time_s[1:] < time_s[:-1]).any():
            newest = np.maximum.accumulate(np.concatenate(([self._last_t], time_s)))[:-1]
            ahead = time_s >= newest
            self.dropped["time goes back"] += int((~ahead).sum())
            table = tuple(column[ahead] for column in table)
        if len(table[0]):
            self._last_t = float(table[0][-1])
            for column in table:
                column.setflags(write=False)
            items.append(Block(*table))

    def _slowly(self, text: bytes) -> np.ndarray:
        rows: list[tuple[float, float, float]] = []
        self.lines += text.count(b"\n")
        by_name = self._columns != _STANDARD[0]
        for line in text.split(b"\n")[:-1]:
            row = self._by_name(line) if by_name else lanes.slow(line)
            if row is None:
                self.dropped[self._wrong(line)] += 1
            else:
                rows.append(row)
        return np.array(rows, np.float64).reshape(-1, 3).T

    def _by_name(self, line: bytes) -> tuple[float, float, float] | None:
        """A row whose columns are not the usual three."""
        columns = self._columns or []
        cells = line.split(b",")
        if len(cells) == len(columns) - 1 and columns[-1] == "temp_c":
            cells.append(b"")
        if len(cells) != len(columns) or len(line) > LINE_MOST or b"\0" in line:
            return None
        by_name = dict(zip(columns, cells))
        return lanes.slow(
            b",".join((by_name["time_s"], by_name["period_us"], by_name.get("temp_c", b"")))
        )

    def _wrong(self, line: bytes) -> str:
        columns = self._columns or []
        least = len(columns) - (columns[-1] == "temp_c")
        return _wrong(line, range(least, len(columns) + 1))


def _columns(line: bytes) -> list[str]:
    """Names of the columns. Raises HeaderError without time_s and period_us."""
    names = [name.strip() for name in line.decode("utf-8", "replace").split(",")]
    for name in _WITHOUT:
        if name not in names:
            raise HeaderError(f"no column {name}; expected time_s,period_us,temp_c")
    if len(set(names)) < len(names):
        raise HeaderError("a column's name stands twice; expected time_s,period_us,temp_c")
    return names


def _wrong(line: bytes, columns: range) -> str:
    """What is wrong with a line that is no row of so many columns."""
    if len(line) > LINE_MOST:
        return _LONG
    if b"\0" in line:
        return "NUL in line"
    return "no number" if line.count(b",") + 1 in columns else "number of columns"


class BareParser:
    """Numbers only, without header: a capture of the wire. Time is counted by the reading rate."""

    _ROW = re.compile(rb"[ \t]*(\d{1,12}(?:\.\d{1,9})?)(?:[,; \t]+(-?\d{1,3}(?:\.\d{1,6})?))?\s*")

    def __init__(self, rate_hz: float) -> None:
        self.header: Header | None = None
        self.dropped: Counter[str] = Counter()
        self.lines = 0
        self._rate_hz = rate_hz
        self._tail = b""
        self._skipping = False
        self._rows = 0

    def feed(self, data: bytes) -> list[Item]:
        """Rows that these further bytes complete."""
        *lines, self._tail = (self._tail + data).split(b"\n")
        if lines and self._skipping:
            del lines[0]
            self._skipping = False
        if len(self._tail) > LINE_MOST:
            self.dropped[_LONG] += not self._skipping
            self.lines += not self._skipping
            self._skipping = True
            self._tail = b""
        rows: list[tuple[float, float, float]] = []
        for line in lines:
            self.lines += 1
            found = self._ROW.fullmatch(line) if len(line) <= LINE_MOST else None
            if found is None:
                self.dropped[_wrong(line, range(1, 3))] += 1
                continue
            time_s = round(self._rows / self._rate_hz, 6)
            self._rows += 1
            rows.append((time_s, float(found[1]), float(found[2]) if found[2] else NAN))
        return [Block(*np.array(rows).T)] if rows else []

    def finish(self) -> list[Item]:
        """The capture is at its end."""
        if self._tail and not self._skipping:
            self.dropped["torn"] += 1
        self._tail = b""
        return []

"""One probe's newest run as its files grow: read in small pieces, part after part, judged."""

from __future__ import annotations

import time
from datetime import datetime
from pathlib import Path

from monitor.blocks import Second
from monitor.chain import Judges
from monitor.findings import Finding, shifted
from monitor.follow import Follower
from monitor.logbook import reader
from monitor.logbook.codec import HeaderError
from monitor.logbook.reader import LogError, Part, Tail
from monitor.view import Lane

LOOK_S = 2.0  # how often new files are looked for
HISTORY_MOST = 4_000_000  # bytes: with less in the newest part, the one before is read too
PIECE = 16_384  # bytes judged at a time


class Packed:
    """A finished part that was packed, read as a Tail is."""

    replaced = False

    def __init__(self, path: Path) -> None:
        self.path = path
        self._chunks = reader.chunks(path)

    def read(self) -> bytes:
        """The next chunk; b"" at the end, or where it cannot be read any further."""
        try:
            return next(self._chunks, b"")
        except LogError:
            return b""


class Followed:
    """One probe's newest run, as its files grow."""

    def __init__(self, lane: Lane, folder: Path) -> None:
        self.lane = lane
        self.folder = folder
        self.follower: Follower | None = None
        self.started: datetime | None = None
        self.offset = 0.0
        self.caught_up = False
        self.heard = time.monotonic()  # when the file last grew
        self.trouble = ""  # what could not be read
        self._parts: list[Part] = []
        self._tail: Tail | Packed | None = None
        self._waiting = b""
        self._looked = 0.0

    def look(self, zero: datetime) -> None:
        """Look for a further part, or a newer run."""
        self._looked = time.monotonic()
        last = reader.last_part(self.folder, self.lane.probe)
        if last is None:
            return
        if self.started != last.header.started:
            self._begin(last, zero)
        elif self._tail is not None and not self._parts and last.path != self._tail.path:
            self._parts.append(last)

    def _begin(self, last: Part, zero: datetime) -> None:
        """Follow this run, with the part before where the newest is young."""
        self.started = last.header.started
        self.offset = (self.started - zero).total_seconds()
        self._parts = [last]
        if last.part > 1 and last.path.stat().st_size < HISTORY_MOST:
            before = [p for p in reader.runs(self._paths()) if p.started == self.started]
            self._parts = [p for run in before for p in run.parts if p.part >= last.part - 1]
        self._tail, self._waiting = None, b""
        self.lane.begin_run(self.offset)
        self.follower = Follower(self.lane.probe, first_part=self._parts[0].part, watch=self._watch)

    def _paths(self) -> list[str]:
        started = f"{self.started:%Y%m%dT%H%M%SZ}"
        probe = self.lane.probe
        keep = reader.in_folder(self.folder, lambda p, start, _: p == probe and start == started)
        return [str(path) for path in keep]

    def _watch(self, second: Second, judges: Judges) -> None:
        self.lane.second(second, judges)

    def read(self, until: float) -> list[Finding]:
        """Findings of what the files grew by. Raises nothing: what is damaged is told."""
        found: list[Finding] = []
        self.caught_up = False
        while self.follower is not None:
            text = self._next()
            if text is None:
                self.caught_up = True
                break
            try:
                found += self.follower.feed(text) if text else self.follower.next_part()
            except HeaderError as wrong:
                self.trouble = f"{self.lane.probe}: a log cannot be read: {wrong}"
                self._tail, self._waiting = None, b""
            if time.monotonic() >= until:
                break
        return [shifted(each, self.offset) for each in found] if self.offset else found

    def _next(self) -> bytes | None:
        """A further piece of text; b"" where a part ends, None where there is no more yet."""
        if self._tail is None:
            if not self._parts:
                return None
            path = self._parts.pop(0).path
            self._tail = Packed(path) if path.suffix == ".gz" else Tail(path)
        if not self._waiting:
            self._waiting = self._tail.read()
            if self._tail.replaced:
                self._begin_anew()
                return None
            if not self._waiting:
                if not self._parts:
                    return None
                self._tail = None
                return b""
            self.heard = time.monotonic()
        piece, self._waiting = self._waiting[:PIECE], self._waiting[PIECE:]
        return piece

    def _begin_anew(self) -> None:
        """The file was cut back or replaced: what was concluded from it may not hold."""
        self.lane = Lane(self.lane.probe, self.lane.bench)
        self.follower = self.started = self._tail = None
        self._waiting = b""
        self._looked = 0.0

    @property
    def stale(self) -> bool:
        """Whether it is time to look for new files."""
        return time.monotonic() - self._looked > LOOK_S

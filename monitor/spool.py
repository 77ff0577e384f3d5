"""Lines that wait for somebody to take them, in a file, so that a restart does not lose them.

Taken lines are forgotten once all are taken; after a crash some may therefore come twice.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

MOST = 20_000_000  # bytes that may wait
LINE_MOST = 65_536


class Spool:
    """First in, first out; bounded by dropping the oldest half, which is counted and said."""

    def __init__(self, path: Path, say: Callable[[str], None], most: int = MOST) -> None:
        self.path = path
        self.dropped = 0
        self._say = say
        self._most = most
        self._at = 0  # bytes of the file that are taken
        self._size = self._begin()

    def _begin(self) -> int:
        """Size of what a run before left; a line it left torn is ended."""
        try:
            data = self._read(0)
        except FileNotFoundError:
            return 0
        if data and not data.endswith(b"\n"):
            self._write(data[: data.rfind(b"\n") + 1], os.O_TRUNC)
        return len(data[: data.rfind(b"\n") + 1])

    def put(self, text: str) -> None:
        """Append a line. One that cannot be kept is counted."""
        data = text.encode("ascii") + b"\n"
        if len(data) > LINE_MOST:
            self._lost(1)
            return
        try:
            if self._size + len(data) > self._most:
                self._halve()
            self._write(data, os.O_APPEND)
            self._size += len(data)
        except OSError:
            self._lost(1)

    def first(self) -> str | None:
        """The oldest line, None if nothing waits."""
        while self._at < self._size:
            data = self._read(self._at, LINE_MOST)
            end = data.find(b"\n")
            if end >= 0 and data[:end].isascii():
                return data[:end].decode("ascii")
            self._at = self._at + end + 1 if end >= 0 else self._size  # somebody else's bytes
        return None

    def done(self) -> None:
        """The oldest line was taken."""
        text = self.first()
        if text is None:
            return
        self._at += len(text) + 1
        if self._at >= self._size:
            self._write(b"", os.O_TRUNC)
            self._at = self._size = 0

    def _halve(self) -> None:
        data = self._read(self._at)
        cut = data.find(b"\n", len(data) // 2) + 1
        self._lost(data[:cut].count(b"\n"))
        self._write(data[cut:], os.O_TRUNC)
        self._at, self._size = 0, len(data) - cut

    def _lost(self, n: int) -> None:
        self.dropped += n
        self._say(f"{self.path.name}: {n} messages dropped, {self.dropped} in all: no more room")

    def _read(self, at: int, most: int = -1) -> bytes:
        fd = os.open(self.path, os.O_RDONLY | os.O_NOFOLLOW | os.O_CLOEXEC)
        with os.fdopen(fd, "rb", buffering=0) as file:
            file.seek(at)
            return bytes(file.read(most))

    def _write(self, data: bytes, how: int) -> None:
        flags = os.O_WRONLY | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC | how
        fd = os.open(self.path, flags, 0o600)
        with os.fdopen(fd, "wb", buffering=0) as file:
            if data and file.write(data) != len(data):
                file.truncate(self._size)
                raise OSError("fell short")

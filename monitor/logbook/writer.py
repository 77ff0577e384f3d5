"""Writing a log: append-only, in parts, never harming what was already written.

Promise: a line that `append` took is with the operating system, so it survives a kill -9 of the
program; after the next `sync` it is on the disk and survives a power cut. After a write that
failed or fell short, the file is cut back to its last whole line before anything else is written;
the whole lines that did get into the file stay there.
"""

from __future__ import annotations

import errno
import gzip
import os
import shutil
from datetime import datetime
from pathlib import Path

from monitor.logbook.codec import Header, file_name

ROOM = 262_144  # bytes that must be free again before a recording goes on: the gap, a head, rows


class LogWriteError(OSError):
    """Nothing more can be written now; `str()` says why in one line.

    written : bytes of whole lines that did get into the file
    """

    def __init__(self, number: int | None, why: str, written: int = 0) -> None:
        super().__init__(number, why)
        self.written = written

    def __str__(self) -> str:
        return str(self.strerror)


class LogWriter:
    """Writes the parts of one run of one probe."""

    def __init__(self, folder: Path, probe: str, started: datetime, run: str) -> None:
        """Make the first part's file. Raises LogWriteError."""
        self.folder = folder
        self.header = Header(probe, started, run, 1)
        self._whole = 0  # bytes up to the last line that was written whole
        self._spoilt = False  # a write failed or fell short after them
        self._left: list[int] = []  # files of earlier parts, to be synced and closed
        self._fd = self._create()
        self.path = self.folder / file_name(self.header)

    def head(self) -> str:
        """The header's text, to be appended first."""
        return self.header.text()

    def append(self, data: bytes) -> None:
        """Append whole lines. Raises LogWriteError, which knows how many of them were written."""
        if self._spoilt:
            self._cut_back()
        view = memoryview(data)
        try:
            while view:
                self._spoilt = True
                view = view[os.write(self._fd, view) :]
        except OSError as wrong:
            written = data.rfind(b"\n", 0, len(data) - len(view)) + 1
            self._whole += written
            why = f"{self.path.name}: {wrong.strerror}"
            raise LogWriteError(wrong.errno, why, written) from None
        self._spoilt = False
        self._whole += len(data)

    def recover(self) -> None:
        """After a failure: cut back to the last whole line, and see whether writing works.

        Raises LogWriteError while it does not.
        """
        self._cut_back()
        room = os.fstatvfs(self._fd)
        if room.f_bavail * room.f_frsize < ROOM:
            raise LogWriteError(errno.ENOSPC, f"{self.path.name}: {os.strerror(errno.ENOSPC)}")
        if not self.empty:
            self.append(b"#\n")

    @property
    def empty(self) -> bool:
        """Whether not even the head of this part is written."""
        return self._whole == 0

    def _cut_back(self) -> None:
        try:
            os.ftruncate(self._fd, self._whole)
        except OSError as wrong:
            raise LogWriteError(wrong.errno, f"{self.path.name}: {wrong.strerror}") from None
        self._spoilt = False

    def sync(self) -> None:
        """Bring what was written to the disk; may take seconds, call it from a thread."""
        left = [self._left.pop() for _ in range(len(self._left))]
        for fd in [*left, self._fd]:
            try:
                os.fsync(fd)
            except OSError:
                pass  # a disk that fails shows at the next append
        for fd in left:
            os.close(fd)

    def next_part(self) -> None:
        """Begin the next part; `sync` closes this one. Raises LogWriteError and keeps this one."""
        before, header = self._fd, self.header
        self.header = Header(header.probe, header.started, header.run, header.part + 1)
        try:
            self._fd = self._create()
        except LogWriteError:
            self.header = header
            raise
        if self._spoilt:
            try:
                os.ftruncate(before, self._whole)
            except OSError:
                pass  # the half line stays the last of that part, where a reader drops it
        self.path = self.folder / file_name(self.header)
        self._whole, self._spoilt = 0, False
        self._left.append(before)

    def close(self) -> None:
        """Sync and close; a part without even a head is taken away."""
        self.sync()
        os.close(self._fd)
        if self.empty:
            self.path.unlink(missing_ok=True)

    def _create(self) -> int:
        path = self.folder / file_name(self.header)
        flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_APPEND | os.O_NOFOLLOW | os.O_CLOEXEC
        try:
            return os.open(path, flags, 0o600)
        except OSError as wrong:
            raise LogWriteError(wrong.errno, f"{path.name}: {wrong.strerror}") from None


def compress(path: Path) -> Path:
    """Gzip a finished part: temporary name, fsync, rename, then remove the plain one.

    Raises OSError; the plain file stays in that case.
    """
    packed = path.with_name(path.name + ".gz")
    temporary = path.with_name(path.name + ".gz.tmp")
    temporary.unlink(missing_ok=True)
    flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_NOFOLLOW
    try:
        with (
            path.open("rb") as plain,
            os.fdopen(os.open(temporary, flags, 0o600), "wb") as raw,
        ):
            with gzip.GzipFile(filename="", fileobj=raw, mode="wb", compresslevel=6) as out:
                shutil.copyfileobj(plain, out, 1 << 18)
            raw.flush()
            os.fsync(raw.fileno())
            written = os.fstat(plain.fileno())
        os.utime(temporary, ns=(written.st_atime_ns, written.st_mtime_ns))
        temporary.rename(packed)
    finally:
        temporary.unlink(missing_ok=True)
    path.unlink()
    return packed

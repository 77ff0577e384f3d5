"""Log files, plain or gzipped, in chunks of bounded size; several of them put in order.

Rules:
- Only regular files are read. A gzip that was cut off gives what can be read of it, and is counted.
- Parts of one run are joined in order of `part`; the same part plain and gzipped is read once.
- A file without a header is a bare capture, and needs to be told its probe and reading rate.
"""

from __future__ import annotations

import errno
import os
import stat
import zlib
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from io import FileIO
from pathlib import Path

from monitor.logbook.codec import FIRST_LINE, Header, HeaderError, NoLogError, parse_name
from monitor.logbook.parser import BareParser, Parser

CHUNK = 262_144
_STEP = 64  # bytes of a spoilt gzip at a time
_GZIP = b"\x1f\x8b"
_READ = os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC  # a pipe without a writer must not hold us


class LogError(ValueError):
    """A file is no log that can be read; `str()` is the one line to show."""


@dataclass(frozen=True)
class Part:
    """One file of a run."""

    path: Path
    header: Header

    @property
    def part(self) -> int:
        """Its number."""
        return self.header.part

    def chunks(self, damage: Counter[str] | None = None) -> Iterator[bytes]:
        """Its text, at most CHUNK bytes at a time; see `chunks`. Raises LogError."""
        return chunks(self.path, damage)


@dataclass(frozen=True)
class Run:
    """The parts of one run of one probe, in order."""

    probe: str
    started: datetime
    parts: tuple[Part, ...]
    rate_hz: float | None = None  # of a bare capture

    def parser(self) -> Parser | BareParser:
        """The parser for its first part."""
        return Parser() if self.rate_hz is None else BareParser(self.rate_hz)


def chunks(path: Path, damage: Counter[str] | None = None) -> Iterator[bytes]:
    """The text of a file, plain or gzipped, in chunks; bounded memory.

    A gzip that is cut off or spoilt is counted in `damage`. Raises LogError.
    """
    damage = Counter() if damage is None else damage
    try:
        file = _opened(path)
    except (OSError, ValueError) as wrong:
        said = wrong.strerror if isinstance(wrong, OSError) else "no path"
        raise LogError(f"{path}: {said}; expected a readable log") from None
    with file:
        try:
            first = file.read(CHUNK)
            rest = iter(lambda: file.read(CHUNK), b"")
            data = _plain(first, rest)
            yield from _inflated(data, damage) if first.startswith(_GZIP) else data
        except OSError as wrong:
            raise LogError(f"{path}: {wrong.strerror}; expected a readable log") from None


def _opened(path: Path) -> FileIO:
    """A regular file, to read from. Raises OSError, and ValueError for what is no path."""
    file = FileIO(path, opener=lambda name, _: os.open(name, _READ))
    if not stat.S_ISREG(os.fstat(file.fileno()).st_mode):
        file.close()
        raise OSError(errno.EINVAL, "no regular file")
    return file


def _plain(first: bytes, rest: Iterator[bytes]) -> Iterator[bytes]:
    if first:
        yield first
    yield from rest


def _inflated(pieces: Iterator[bytes], damage: Counter[str]) -> Iterator[bytes]:
    """What a gzip holds, up to where it is cut off or spoilt."""
    unpack, whole = zlib.decompressobj(wbits=31), True
    for data in pieces:
        full = False  # then more may wait inside than was asked for
        while data or full:
            whole = False
            before = unpack.copy()
            try:
                text = unpack.decompress(data, CHUNK)
            except zlib.error:
                damage["gzip damaged"] += 1
                yield from _up_to_damage(before, data)
                return
            if text:
                yield text
            data, full = unpack.unconsumed_tail, len(text) == CHUNK
            if unpack.eof:  # another member may follow
                data, full, whole = unpack.unused_data, False, True
                unpack = zlib.decompressobj(wbits=31)
    if not whole:
        damage["gzip cut off"] += 1


def _up_to_damage(unpack: zlib._Decompress, data: bytes) -> Iterator[bytes]:
    """What can be read of a piece that holds the damage."""
    try:
        for at in range(0, len(data), _STEP):
            yield unpack.decompress(data[at : at + _STEP])
    except zlib.error:
        return


def read_header(path: Path) -> Header | None:
    """The header of a file; None if it has none and may be a bare capture. Raises LogError."""
    parser = Parser()
    try:
        for chunk in chunks(path):
            parser.feed(chunk)
            if parser.header is not None:
                return parser.header
        parser.finish()
    except NoLogError:
        return None
    except HeaderError as wrong:
        raise LogError(f"{path}: {wrong}") from None
    return parser.header


def runs(
    paths: Sequence[str], bare_probe: str | None = None, bare_rate_hz: float | None = None
) -> list[Run]:
    """These files as runs in order of their start, parts joined.

    Raises LogError naming the file that is no log.
    """
    parts: dict[tuple[str, str, int], Part] = {}
    bare: list[Run] = []
    for path in map(Path, paths):
        header = read_header(path)
        if header is None:
            bare.append(_bare(path, bare_probe, bare_rate_hz))
            continue
        run = header.run or header.started.isoformat()
        key = (header.probe, run, header.part)
        if key not in parts or parts[key].path.suffix == ".gz":
            parts[key] = Part(path, header)
    grouped: dict[tuple[str, str], list[Part]] = {}
    for (probe, run, _), part in sorted(parts.items(), key=lambda item: item[0][2]):
        grouped.setdefault((probe, run), []).append(part)
    found = [Run(probe, its[0].header.started, tuple(its)) for (probe, _), its in grouped.items()]
    return sorted([*found, *bare], key=lambda run: run.started)


def _bare(path: Path, probe: str | None, rate_hz: float | None) -> Run:
    if probe is None or rate_hz is None:
        raise LogError(
            f"{path}: first line is no log's; expected {FIRST_LINE!r}, or for a bare capture"
            " --probe and --rate"
        )
    started = datetime(2000, 1, 1, tzinfo=UTC)
    return Run(probe, started, (Part(path, Header(probe, started)),), rate_hz)


def in_folder(folder: Path, keep: Callable[[str, str, int], bool] | None = None) -> list[Path]:
    """Logs of this folder by their names (probe, start, part), oldest first; a part once."""
    named: dict[tuple[str, str, int], Path] = {}
    for path in sorted(folder.glob("*.log*")):
        name = parse_name(path.name)
        if name is None or path.is_symlink():
            continue
        probe, start, part, packed = name
        if keep is None or keep(probe, start, part):
            if packed and (start, probe, part) in named:
                continue
            named[start, probe, part] = path
    return [named[key] for key in sorted(named)]


def last_part(folder: Path, probe: str) -> Part | None:
    """The newest part of the newest run of this probe that can be read."""
    for path in reversed(in_folder(folder, lambda name, *_: name == probe)):
        try:
            header = read_header(path)
        except LogError:
            continue
        if header is not None and header.probe == probe:
            return Part(path, header)
    return None


def logs_since(folder: Path, first: datetime) -> list[Path]:
    """Logs of this folder that were written to after `first`, with the parts before them."""
    after = [p for p in in_folder(folder) if p.stat().st_mtime >= first.timestamp()]
    starts = {parse_name(p.name)[:2] for p in after if parse_name(p.name)}  # type: ignore[index]
    return in_folder(folder, lambda probe, start, _: (probe, start) in starts)


class Tail:
    """Follows a file that grows; says when it was cut short or replaced."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.replaced = False  # since the last read: begin anew with a new Follower
        self._at = 0
        self._inode: int | None = None

    def read(self) -> bytes:
        """Whole lines that came since the last time, at most CHUNK bytes; b"" for nothing.

        A half line waits, so that a writer may cut back to its last whole one unnoticed.
        """
        try:
            with _opened(self.path) as file:
                info = os.fstat(file.fileno())
                self.replaced = self._inode is not None and (
                    info.st_ino != self._inode or info.st_size < self._at
                )
                if self.replaced:
                    self._at = 0
                self._inode = info.st_ino
                file.seek(self._at)
                data = file.read(CHUNK)
        except OSError:
            return b""
        if len(data) < CHUNK or b"\n" in data:
            data = data[: data.rfind(b"\n") + 1]
        self._at += len(data)
        return data

"""Writing: private files, whole lines only, a full disk, parts, packing."""

from __future__ import annotations

import errno
import gzip
import os
import resource
import signal
import stat
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

import pytest

from monitor.logbook import writer as writing
from monitor.logbook.reader import read_header
from monitor.logbook.writer import LogWriteError, LogWriter

STARTED = datetime(2026, 3, 14, 18, tzinfo=UTC)


@pytest.fixture
def log(tmp_path: Path) -> Iterator[LogWriter]:
    made = LogWriter(tmp_path, "p1", STARTED, "6f1c")
    made.append(made.head().encode())
    yield made
    made.close()


@contextmanager
def full_at(size: int) -> Iterator[None]:
    """No file may grow beyond this size: as on a full disk, a write falls short, then fails."""
    before = resource.getrlimit(resource.RLIMIT_FSIZE)
    ignored = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, before[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, before)
        signal.signal(signal.SIGXFSZ, ignored)


def test_files_are_private_and_never_overwritten(log: LogWriter, tmp_path: Path) -> None:
    assert stat.S_IMODE(log.path.stat().st_mode) == 0o600
    with pytest.raises(LogWriteError) as refused:
        LogWriter(tmp_path, "p1", STARTED, "6f1c")
    assert refused.value.errno == errno.EEXIST
    (tmp_path / "p2-20260314T180000Z-001.log").symlink_to(tmp_path / "elsewhere")
    with pytest.raises(LogWriteError):
        LogWriter(tmp_path, "p2", STARTED, "6f1c")
    assert not (tmp_path / "elsewhere").exists()


def test_full_disk_leaves_no_half_line_and_goes_on_when_there_is_room(log: LogWriter) -> None:
    log.append(b"1,2\n")
    before = log.path.read_bytes()
    with full_at(len(before) + 3):
        with pytest.raises(LogWriteError) as full:
            log.append(b"2,3\n3,4\n")
        assert full.value.errno == errno.EFBIG
        assert log.path.read_bytes() == before + b"2,3"  # the write fell short: no torn row counts
        with pytest.raises(LogWriteError):
            log.append(b"9,99999\n")
    with full_at(len(before) + 1), pytest.raises(LogWriteError):
        log.recover()
    log.recover()
    log.append(b"4,5\n")
    assert log.path.read_bytes() == before + b"#\n4,5\n"


def test_append_after_a_failure_cuts_back_by_itself(log: LogWriter) -> None:
    before = log.path.read_bytes()
    with full_at(len(before) + 3), pytest.raises(LogWriteError):
        log.append(b"2,3\n3,4\n")
    log.append(b"4,5\n")
    assert log.path.read_bytes() == before + b"4,5\n"


def test_short_writes_are_completed(log: LogWriter, monkeypatch: pytest.MonkeyPatch) -> None:
    write = os.write
    monkeypatch.setattr(os, "write", lambda fd, data: write(fd, bytes(data[:3])))
    before = log.path.read_bytes()
    log.append(b"1,2\n3,4\n")
    assert log.path.read_bytes() == before + b"1,2\n3,4\n"


def test_next_part_begins_another_file_of_the_same_run(log: LogWriter) -> None:
    first, before = log.path, log.path.read_bytes()
    with full_at(len(before) + 3), pytest.raises(LogWriteError):
        log.append(b"2,3\n3,4\n")
    log.next_part()
    log.append(log.head().encode() + b"5,6\n")
    one, two = read_header(first), read_header(log.path)
    assert one is not None
    assert two is not None
    assert (one.run, one.part, two.run, two.part) == ("6f1c", 1, "6f1c", 2)
    assert first.read_bytes() == before


def test_next_part_that_cannot_be_made_keeps_this_one(log: LogWriter, tmp_path: Path) -> None:
    blocked = tmp_path / "p1-20260314T180000Z-002.log"
    blocked.write_text("")
    with pytest.raises(LogWriteError):
        log.next_part()
    log.append(b"1,2\n")
    assert log.header.part == 1
    assert log.path.read_bytes().endswith(b"1,2\n")


def test_compress_keeps_text_age_and_privacy(tmp_path: Path) -> None:
    path = tmp_path / "p1-20260314T180000Z-001.log"
    path.write_bytes(b"1,2\n" * 200_000)
    os.utime(path, (1e9, 1e9))
    packed = writing.compress(path)
    assert gzip.decompress(packed.read_bytes()) == b"1,2\n" * 200_000
    assert packed.stat().st_mtime == 1e9
    assert stat.S_IMODE(packed.stat().st_mode) == 0o600
    assert os.listdir(tmp_path) == [packed.name]


def test_compress_on_a_full_disk_harms_nothing(tmp_path: Path) -> None:
    path = tmp_path / "p1-20260314T180000Z-001.log"
    path.write_bytes(os.urandom(100_000))
    with full_at(5000), pytest.raises(OSError):
        writing.compress(path)
    assert os.listdir(tmp_path) == [path.name]

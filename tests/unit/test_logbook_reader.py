"""Files of a log: plain, gzipped, cut off, joined, followed."""

from __future__ import annotations

import gzip
import os
import random
from collections import Counter
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from monitor.logbook import reader
from monitor.logbook.codec import Header, file_name
from monitor.logbook.reader import CHUNK, LogError, Tail

STARTED = datetime(2026, 3, 14, 18, tzinfo=UTC)


def some_text(rows: int) -> bytes:
    rng = random.Random(3)
    return b"".join(b"%d.%03d,585.5\n" % (i, rng.randrange(999)) for i in range(rows))


def part(folder: Path, number: int, start: datetime = STARTED, probe: str = "p1") -> Path:
    header = Header(probe, start, f"run{start:%H}", number)
    path = folder / file_name(header)
    path.write_text(header.text())
    return path


def test_plain_and_gzip_read_the_same_in_bounded_chunks(tmp_path: Path) -> None:
    text = b"0,585.5,25\n" * 300_000  # packs 300 to 1
    (tmp_path / "a").write_bytes(text)
    (tmp_path / "b").write_bytes(gzip.compress(text[:7]) + gzip.compress(text[7:]))
    for name in "ab":
        damage: Counter[str] = Counter()
        chunks = list(reader.chunks(tmp_path / name, damage))
        assert b"".join(chunks) == text
        assert max(map(len, chunks)) <= CHUNK
        assert not damage


def test_gzip_cut_anywhere_gives_what_is_before_and_is_counted(tmp_path: Path) -> None:
    text = some_text(3000)
    packed = gzip.compress(text)
    path, least = tmp_path / "a", 0
    for size in [*range(2, 40), *range(40, len(packed), 97), len(packed) - 1]:
        path.write_bytes(packed[:size])
        damage: Counter[str] = Counter()
        read = b"".join(reader.chunks(path, damage))
        assert text.startswith(read)
        assert len(read) >= least
        assert damage == {"gzip cut off": 1}
        least = len(read)
    assert least == len(text)  # only the checksum was cut


def test_gzip_spoilt_inside_gives_what_is_before_and_is_counted(tmp_path: Path) -> None:
    text = some_text(20_000)
    packed = bytearray(gzip.compress(text))
    half = len(packed) // 2
    packed[half:] = random.Random(4).randbytes(len(packed) - half)
    (tmp_path / "a").write_bytes(packed)
    damage: Counter[str] = Counter()
    read = b"".join(reader.chunks(tmp_path / "a", damage))
    assert damage == {"gzip damaged": 1}
    assert read[: len(text) * 2 // 5] == text[: len(text) * 2 // 5]


def test_only_regular_files(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    for path in (tmp_path, tmp_path / "pipe", tmp_path / "none", Path("a\0b")):
        with pytest.raises(LogError, match="expected a"):
            list(reader.chunks(path))


def test_header_longer_than_a_chunk(tmp_path: Path) -> None:
    head, columns = Header("p1", STARTED).text().rsplit("\ntime_s", 1)
    path = tmp_path / "a"
    path.write_text(head + "\n# " + "x" * (CHUNK + 9) + "\ntime_s" + columns)
    assert reader.read_header(path) == Header("p1", STARTED)


def test_parts_are_joined_in_order_runs_by_start_probes_apart(tmp_path: Path) -> None:
    later = STARTED + timedelta(hours=2)
    parts = [part(tmp_path, n) for n in (1, 2, 10)]
    second = part(tmp_path, 1, later)
    other = part(tmp_path, 1, probe="p2")
    packed = tmp_path / (parts[1].name + ".gz")
    packed.write_bytes(gzip.compress(parts[1].read_bytes()))
    given = [second, packed, parts[2], other, parts[1], parts[0]]
    runs = reader.runs([str(path) for path in given])
    assert {(run.probe, run.started): [p.path for p in run.parts] for run in runs} == {
        ("p1", STARTED): parts,
        ("p2", STARTED): [other],
        ("p1", later): [second],
    }
    assert [run.started for run in runs] == [STARTED, STARTED, later]
    assert reader.in_folder(tmp_path, lambda probe, *_: probe == "p2") == [other]


def test_bare_capture_needs_probe_and_rate(tmp_path: Path) -> None:
    path = tmp_path / "capture.txt"
    path.write_text("254\n255\n")
    with pytest.raises(LogError, match="--probe and --rate"):
        reader.runs([str(path)])
    (run,) = reader.runs([str(path)], "p1", 10.0)
    assert (run.probe, run.rate_hz) == ("p1", 10.0)


def test_a_file_that_is_no_log_is_named(tmp_path: Path) -> None:
    path = tmp_path / "a.log"
    path.write_text("# stillbrine log 7\n")
    with pytest.raises(LogError, match=r"a\.log: log version 7 is not known; expected 1"):
        reader.runs([str(path)])


def test_tail_gives_whole_lines_and_notices_a_file_cut_short_or_replaced(tmp_path: Path) -> None:
    path = tmp_path / "a"
    tail = Tail(path)
    assert tail.read() == b""
    path.write_bytes(b"1,2\n3,")
    assert tail.read() == b"1,2\n"
    path.write_bytes(b"1,2\n")  # a half line taken back is nothing
    assert (tail.read(), tail.replaced) == (b"", False)
    path.write_bytes(b"1,2\n3,4\n")
    assert tail.read() == b"3,4\n"
    path.write_bytes(b"5,6\n")
    assert (tail.read(), tail.replaced) == (b"5,6\n", True)
    (tmp_path / "b").write_bytes(b"7,8\n9,9\n")
    (tmp_path / "b").rename(path)
    assert (tail.read(), tail.replaced) == (b"7,8\n9,9\n", True)
    assert (tail.read(), tail.replaced) == (b"", False)


def test_tail_does_not_wait_for_a_pipe(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    assert Tail(tmp_path / "pipe").read() == b""

"""Packing, keeping and space: only finished parts, only what is old, never silently."""

from __future__ import annotations

import gzip
import os
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from monitor.bench import Logs
from monitor.housekeeping import Housekeeping, Rate, finished

NOW = datetime(2026, 6, 30, tzinfo=UTC)


class HandClock:
    speed = 1.0
    s = 0.0

    def now_s(self) -> float:
        return self.s

    def utc(self) -> datetime:
        return NOW


def log(folder: Path, name: str, days_old: float) -> Path:
    path = folder / name
    path.write_bytes(gzip.compress(b"1,2\n") if name.endswith(".gz") else b"1,2\n")
    at = (NOW - timedelta(days=days_old)).timestamp()
    os.utime(path, (at, at))
    return path


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    log(tmp_path, "p1-20260501T000000Z-001.log", 60)
    log(tmp_path, "p1-20260501T000000Z-002.log.gz", 59)
    log(tmp_path, "p1-20260620T000000Z-001.log", 9)
    log(tmp_path, "p1-20260629T000000Z-001.log", 1)
    log(tmp_path, "p2-20260401T000000Z-001.log", 90)
    log(tmp_path, "p1-20260501T000000Z.findings.jsonl", 60)
    log(tmp_path, "diary.log", 500)
    (tmp_path / "p9-20200101T000000Z-001.log").symlink_to("/etc/passwd")
    return tmp_path


class Kept:
    def __init__(self, folder: Path) -> None:
        self.said: list[str] = []
        self.troubles: list[str | None] = []
        self.clock = HandClock()
        self.keeping = Housekeeping(
            folder,
            self.clock,  # type: ignore[arg-type]
            lambda probe, what, text: self.troubles.append(text),
            self.said.append,
        )


def test_the_newest_of_a_probe_and_what_is_written_are_not_finished(folder: Path) -> None:
    active = folder / "p1-20260620T000000Z-001.log"
    assert [path.name for path in finished(folder, {active})] == [
        "p1-20260501T000000Z-001.log",
        "p1-20260501T000000Z-002.log.gz",
    ]


def test_finished_parts_are_packed(folder: Path) -> None:
    kept = Kept(folder)
    kept.keeping.tidy(Logs(), ())
    assert {path.name for path in folder.glob("*.log*")} == {
        "p1-20260501T000000Z-001.log.gz",
        "p1-20260501T000000Z-002.log.gz",
        "p1-20260620T000000Z-001.log.gz",
        "p1-20260629T000000Z-001.log",
        "p2-20260401T000000Z-001.log",
        "p9-20200101T000000Z-001.log",
        "diary.log",
    }
    assert not kept.said
    assert gzip.decompress((folder / "p1-20260501T000000Z-001.log.gz").read_bytes()) == b"1,2\n"


def test_nothing_is_packed_or_removed_unless_asked(folder: Path) -> None:
    before = sorted(os.listdir(folder))
    Kept(folder).keeping.tidy(Logs(compress=False), ())
    assert sorted(os.listdir(folder)) == before


def test_what_is_older_than_is_kept_is_removed_and_said(folder: Path) -> None:
    kept = Kept(folder)
    kept.keeping.tidy(Logs(compress=False, keep_days=30.0), ())
    assert {path.name for path in folder.iterdir()} == {
        "p1-20260620T000000Z-001.log",
        "p1-20260629T000000Z-001.log",
        "p2-20260401T000000Z-001.log",  # old, but all there is of that probe
        "p9-20200101T000000Z-001.log",
        "diary.log",
    }
    assert len(kept.said) == 3
    assert kept.said[0] == (
        "p1-20260501T000000Z-001.log: removed, older than 30 days (logs.keep_days)"
    )


def test_little_room_is_said_and_taken_back(folder: Path) -> None:
    kept = Kept(folder)
    kept.keeping.look(Logs(free_mb=1e9))
    kept.keeping.look(Logs(free_mb=0.0))
    assert str(kept.troubles[0]).endswith("MB free for the logs; expected 1e+09 MB or more")
    assert kept.troubles[1] is None


def test_a_disk_that_will_not_last_the_night() -> None:
    rate = Rate()
    assert rate.lasts_s(0.0, 1000) == float("inf")
    assert rate.lasts_s(300.0, 900) == float("inf")  # too soon to tell
    assert rate.lasts_s(600.0, 800) == 2400.0
    for n in range(1, 100):
        rate.lasts_s(600.0 + 5.0 * n, 800)
    assert rate.lasts_s(1205.0, 800) == float("inf")  # it fills no more

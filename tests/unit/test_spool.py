"""Lines that wait on disk: in order, over a restart, bounded, whatever is in the file."""

from __future__ import annotations

import stat
from pathlib import Path

from monitor.spool import Spool


def drained(spool: Spool) -> list[str]:
    taken = []
    while (text := spool.first()) is not None:
        taken.append(text)
        spool.done()
    return taken


def test_first_in_first_out_and_empty_again(tmp_path: Path) -> None:
    spool = Spool(tmp_path / "q", print)
    for n in range(100):
        spool.put(f"line {n}")
    assert stat.S_IMODE(spool.path.stat().st_mode) == 0o600
    assert drained(spool) == [f"line {n}" for n in range(100)]
    assert spool.path.stat().st_size == 0
    spool.put("more")
    assert drained(spool) == ["more"]


def test_what_waits_outlives_a_restart_but_for_a_torn_line(tmp_path: Path) -> None:
    spool = Spool(tmp_path / "q", print)
    for n in range(3):
        spool.put(f"line {n}")
    with spool.path.open("ab") as file:
        file.write(b"torn")
    again = Spool(tmp_path / "q", print)
    again.put("new")
    assert drained(again) == ["line 0", "line 1", "line 2", "new"]


def test_bounded_by_dropping_the_oldest_which_is_said(tmp_path: Path) -> None:
    said: list[str] = []
    spool = Spool(tmp_path / "q", said.append, most=1000)
    for n in range(500):
        spool.put(f"line {n:03d}")
        assert spool.path.stat().st_size <= 1000
    taken = drained(spool)
    assert taken[-1] == "line 499"
    assert taken == sorted(taken)
    assert len(taken) + spool.dropped == 500
    assert said[-1].endswith(f"{spool.dropped} in all: no more room")


def test_a_line_too_long_is_counted(tmp_path: Path) -> None:
    said: list[str] = []
    spool = Spool(tmp_path / "q", said.append)
    spool.put("x" * 70_000)
    assert (spool.first(), spool.dropped, len(said)) == (None, 1, 1)


def test_bytes_of_others_are_passed_over(tmp_path: Path) -> None:
    (tmp_path / "q").write_bytes(b"\xff\x00\x1b[2J\ngood\n")
    assert drained(Spool(tmp_path / "q", print)) == ["good"]

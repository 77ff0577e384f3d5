"""A full disk, and one that cannot be written: nothing recorded is harmed, people are told."""

from __future__ import annotations

import json
import os
import subprocess
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from monitor.control import ControlError
from monitor.logbook.parser import Parser
from tests.service.running import OnPtys, Run, events, running, until
from tests.service.test_run import replayed


@contextmanager
def mounted(folder: Path, options: str) -> Iterator[Path]:
    """A small file system of its own; skips where none may be mounted."""
    folder.mkdir()
    line = ["mount", "-t", "tmpfs", "-o", options, "tmpfs", str(folder)]
    try:
        done = subprocess.run(line, capture_output=True, text=True)
    except FileNotFoundError:
        pytest.skip("no mount command here")
    if done.returncode:
        pytest.skip(f"a tmpfs cannot be mounted (needs root): {done.stderr.strip()}")
    try:
        yield folder
    finally:
        subprocess.run(["umount", "-l", str(folder)], check=True)


def alarm_to(where: Path) -> tuple[str, Path]:
    """The table of an alarm whose command appends what it is told to a file."""
    told, script = where / "alarmed.jsonl", where / "alarm.sh"
    script.write_text(f"#!/bin/sh\nexec cat >> {told}\n")
    script.chmod(0o700)
    return f'[alarm.owner]\ncommand = ["{script}"]\n', told


def test_recording_pauses_with_an_alarm_and_resumes_by_itself(tmp_path: Path) -> None:
    text, told = alarm_to(tmp_path)
    with (
        mounted(tmp_path / "disk", "size=2m") as disk,
        OnPtys(tmp_path, rate_hz=50.0) as bench,
    ):
        bench.write(text)
        with running(bench, tmp_path, disk / "logs") as run:
            until(lambda: run.rows() > 100)
            before = run.log().read_bytes()
            filler = disk / "filler"
            full = time.monotonic()
            _fill(filler)
            until(lambda: '"disk"' in told.read_text() if told.exists() else False, 10)
            alarmed_s = time.monotonic() - full
            assert "recording paused" in run.said
            with pytest.raises(ControlError, match="nothing can be written to the log now"):
                run.order("note", {"text": "x"})
            assert run.log().read_bytes().startswith(before)
            time.sleep(2.0)
            paused = run.rows()
            freed = time.monotonic()
            filler.unlink()
            until(lambda: run.rows() > paused + 10, 10)
            resumed_s = time.monotonic() - freed
            until(lambda: json.loads(told.read_text().splitlines()[-1])["to_t"] is not None)
            assert run.order("note", {"text": "after"})["ok"]
            assert run.process.poll() is None
            gaps = [e for e in events(run.log(), "gap") if e.get("why") == "disk"]
            assert gaps
            whole = run.log().read_bytes()
            assert whole.startswith(before)
            parser = Parser()
            parser.feed(whole)
            assert not parser.dropped
            assert run.end() == 0
            assert run.told == replayed(run.log())
            print(f"alarm after {alarmed_s:.1f} s, reading {resumed_s:.1f} s after there was room")


def _fill(path: Path) -> None:
    with path.open("ab", buffering=0) as file:
        for size in (65536, 4096, 1):
            try:
                while True:
                    file.write(b"x" * size)
            except OSError:
                pass
        assert os.fstatvfs(file.fileno()).f_bavail == 0


def test_a_start_on_a_full_disk_waits_for_room(tmp_path: Path) -> None:
    text, told = alarm_to(tmp_path)
    with mounted(tmp_path / "disk", "size=2m") as disk, OnPtys(tmp_path) as bench:
        bench.write(text)
        (disk / "logs").mkdir(mode=0o700)
        _fill(disk / "filler")
        run = Run(bench.path, disk / "logs", tmp_path)
        try:
            until(lambda: told.exists() and '"disk"' in told.read_text(), 15)
            (disk / "filler").unlink()
            until(lambda: run.rows() > 3, 10)
            assert run.end() == 0
            assert run.told == replayed(run.log())
        finally:
            run.process.kill()
            run.process.wait()


def test_little_room_is_said_ahead_of_time(tmp_path: Path) -> None:
    with mounted(tmp_path / "disk", "size=20m") as disk, OnPtys(tmp_path) as bench:
        bench.write("[logs]\nfree_mb = 100\n")
        with running(bench, tmp_path, disk / "logs") as run:
            until(lambda: "MB free for the logs; expected 100 MB or more" in run.said)
            assert run.end() == 0


def test_a_folder_that_cannot_be_written_is_one_line(tmp_path: Path) -> None:
    with mounted(tmp_path / "disk", "size=1m") as disk, OnPtys(tmp_path) as bench:
        subprocess.run(["mount", "-o", "remount,ro", str(disk)], check=True)
        run = Run(bench.path, disk / "logs", tmp_path)
        assert run.process.wait(20) == 2
        last = run.said.splitlines()[-1]
        assert last.startswith(f"stillbrine: {disk}/logs: Read-only file system; expected")
        assert "Traceback" not in run.said

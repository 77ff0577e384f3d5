"""Calibrate and verify while a service has the port: real processes on pseudo-terminals."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from monitor.bench import parse
from monitor.control import ControlError
from tests.service.running import MAIN, OnPtys, Run, events, running, until

pytestmark = pytest.mark.slow


class Typed:
    """A command as a child process, with a person at its standard input."""

    def __init__(self, run: Run, where: Path, *words: str) -> None:
        self.said = where / f"{words[0]}.txt"
        with self.said.open("wb") as out:
            self.process = subprocess.Popen(
                [sys.executable, "-c", MAIN, *words],
                stdin=subprocess.PIPE,
                stdout=out,
                stderr=out,
                env={**run.environ, "PYTHONUNBUFFERED": "1"},
            )

    def waits(self, text: str, limit_s: float = 90.0) -> None:
        """Until this was said."""
        until(lambda: text in self.said.read_text() or self.process.poll() is not None, limit_s)
        assert text in self.said.read_text(), self.said.read_text()

    def type(self, line: str) -> None:
        """A line and Enter."""
        assert self.process.stdin is not None
        os.write(self.process.stdin.fileno(), f"{line}\n".encode())

    def ends(self) -> int:
        """Its exit code, once it ended by itself."""
        assert self.process.stdin is not None
        self.process.stdin.close()
        return self.process.wait(15)


def test_a_standard_and_a_check_are_read_from_the_services_log(tmp_path: Path) -> None:
    (tmp_path / "stillbrine").mkdir(mode=0o700)
    with OnPtys(tmp_path) as bench, running(bench, tmp_path) as run:
        words = ["--bench", str(bench.path), "--probe", "p1", "--by", "ab"]
        guided = Typed(run, tmp_path, "calibrate", *words, "--readings", "100", "--set", "new")
        guided.waits("marked as out")
        (out,) = events(run.log(), "out")
        assert (out["why"], out["by"]) == ("standard", "ab")
        guided.type("0.08")
        guided.waits("0.08 % taken")
        guided.type("done")
        guided.waits("back into the tank")
        before, after = events(run.log(), "calibration")  # in force before the probe is back
        assert before["name"] != after["name"]
        assert not events(run.log(), "back")
        guided.type("")
        assert guided.ends() == 0
        assert len(events(run.log(), "back")) == 1
        (standard,) = parse(bench.path.read_text()).probe["p1"].standards_in_force
        assert (standard.set, standard.salinity_pct) == ("new", 0.08)
        assert standard.readings >= 100

        check = Typed(run, tmp_path, "verify", *words, "--salinity", "0.08", "--readings", "100")
        check.waits("back into the tank")
        check.ends()  # nobody answers: it stays out, and is said to
        assert "stays marked as out" in check.said.read_text()
        assert "agrees with the check standard" in check.said.read_text()
        (made,) = events(run.log(), "check")
        assert (made["salinity_pct"], made["by"]) == (0.08, "ab")
        assert made["read_pct"] == pytest.approx(0.08, rel=2e-3)
        assert len(events(run.log(), "out")) == 2
        assert len(events(run.log(), "back")) == 1


def test_a_bench_file_that_does_not_check_is_refused_to_who_asked(tmp_path: Path) -> None:
    with OnPtys(tmp_path) as bench, running(bench, tmp_path) as run:
        run.order("reload", {})
        bench.write("[tank.t9]\nrest_band_pct = 1\nmoed = 1\n")
        with pytest.raises(ControlError, match=r"tank\.t9\.moed"):
            run.order("reload", {})

"""`stillbrine run` as a real process: orders, signals, locks, ports that come and go."""

from __future__ import annotations

import configparser
import signal
import socket
import stat
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

import monitor
from monitor.control import ControlError
from tests.service.running import MAIN, OnPtys, Run, events, running, times, until


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[OnPtys]:
    with OnPtys(tmp_path) as made:
        yield made


def replayed(*logs: Path) -> list[str]:
    line = [sys.executable, "-c", MAIN, "replay", *map(str, logs), "--findings"]
    done = subprocess.run(line, capture_output=True, text=True, timeout=60)
    assert done.returncode == 0, done.stderr
    return [each for each in done.stdout.splitlines() if '"unwatched"' not in each]


def test_orders_are_answered_once_they_are_in_the_log(bench: OnPtys, tmp_path: Path) -> None:
    with running(bench, tmp_path) as run:
        for n in range(20):
            run.order("note", {"text": f"n{n}", "by": "ab"})
            assert f'"n{n}"' in run.log().read_text()
        answer = run.order(
            "dose", {"tank": "t1", "liquid": "saline", "volume_ml": 20.0, "by": "ab"}, ago_s=2.0
        )
        (dose,) = events(run.log(), "dose")
        assert dose["TIME"] == pytest.approx(answer["time_s"], abs=0.01)
        assert dose["id"] == answer["id"]
        with pytest.raises(ControlError, match="tank 't9' has no probe; expected one of t1"):
            run.order("dose", {"tank": "t9", "liquid": "saline", "volume_ml": 20.0})
        assert len(events(run.log(), "dose")) == 1
        (path,) = run.socket_folder.glob("*.sock")
        assert stat.S_IMODE(path.stat().st_mode) == 0o600
        assert stat.S_IMODE(run.socket_folder.stat().st_mode) == 0o700
        assert stat.S_IMODE(run.log().stat().st_mode) == 0o600
        assert stat.S_IMODE(run.logs.stat().st_mode) == 0o700


def test_the_supervisor_is_told(
    bench: OnPtys, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as heard:
        heard.bind(str(tmp_path / "notify"))
        heard.settimeout(15)
        monkeypatch.setenv("NOTIFY_SOCKET", str(tmp_path / "notify"))
        monkeypatch.setenv("WATCHDOG_USEC", "400000")
        monkeypatch.delenv("WATCHDOG_PID", raising=False)
        with running(bench, tmp_path) as run:
            told = {heard.recv(100) for _ in range(4)}
            assert told == {b"READY=1", b"WATCHDOG=1"}
            assert run.end() == 0
        while (last := heard.recv(100)) == b"WATCHDOG=1":
            pass
        assert last == b"STOPPING=1"


def test_the_unit_file_is_one() -> None:
    unit = configparser.ConfigParser(strict=False, interpolation=None)
    unit.optionxform = str  # type: ignore[assignment,method-assign]
    unit.read_string((Path(monitor.__file__).parent / "stillbrine.service").read_text())
    assert unit.sections() == ["Unit", "Service", "Install"]
    assert unit["Service"]["Type"] == "notify"
    assert "%t" in unit["Service"]["ReadWritePaths"]  # of the control socket


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_ends_it_cleanly(bench: OnPtys, tmp_path: Path, number: int) -> None:
    with running(bench, tmp_path) as run:
        assert run.end(number) == 0
        assert run.log().read_text().splitlines()[-1].endswith(" end {}")
        assert not list(run.socket_folder.glob("*.sock"))
        assert "Traceback" not in run.said


def test_findings_printed_are_those_of_the_replay(bench: OnPtys, tmp_path: Path) -> None:
    with running(bench, tmp_path) as run:
        bench.do(lambda: bench.virtual.dose("t1", "saline", 60.0, 3.0))
        run.order("dose", {"tank": "t1", "liquid": "saline", "volume_ml": 60.0, "open_s": 3.0})
        until(lambda: any('"outlook"' in each for each in run.told), 30)
        bench.do(lambda: bench.virtual.unplug("p1"))
        time.sleep(1.0)
        bench.do(lambda: bench.virtual.plug("p1"))
        bench.do(lambda: bench.virtual.fault("p1", "short"))
        until(lambda: any('"short"' in each for each in run.told), 30)
        assert run.end() == 0
        assert run.told == replayed(run.log())
        kept = run.log().name.replace("-001.log", ".findings.jsonl")
        assert (run.logs / kept).read_text() == run.out.read_text()


def test_sighup_takes_a_good_bench_file_and_refuses_a_bad_one(
    bench: OnPtys, tmp_path: Path
) -> None:
    with running(bench, tmp_path) as run:
        bench.write('[nonsense]\nx = "\x1b[31m"\n'.replace("\x1b", "\\u001b"))
        run.process.send_signal(signal.SIGHUP)
        until(lambda: "not taken, the old one stays in force: bench.toml: nonsense" in run.said)
        with pytest.raises(ControlError, match="nonsense"):
            run.order("reload", {})
        assert len(events(run.log(), "bench")) == 1
        bench.text = bench.text.replace("rest_band_pct = 0.001", "rest_band_pct = 0.002")
        bench.write("")
        run.process.send_signal(signal.SIGHUP)
        until(lambda: len(events(run.log(), "bench")) == 2)
        assert events(run.log(), "bench")[1]["tank"]["t1"]["rest_band_pct"] == 0.002
        rows = run.rows()
        until(lambda: run.rows() > rows + 5)
        assert run.end() == 0
        assert run.told == replayed(run.log())


def test_sighup_with_another_baud_opens_the_port_anew(bench: OnPtys, tmp_path: Path) -> None:
    with running(bench, tmp_path) as run:
        bench.text = bench.text.replace("[probe.p1]\n", "[probe.p1]\nbaud = 57600\n")
        bench.write("")
        run.process.send_signal(signal.SIGHUP)
        until(lambda: [e["link"] for e in events(run.log(), "gap")] == ["back", "lost", "back"])
        rows = run.rows()
        until(lambda: run.rows() > rows + 5)
        assert "busy" not in run.said


def test_a_probe_is_taken_away_and_added_again(tmp_path: Path) -> None:
    with OnPtys(tmp_path, probes=2) as bench, running(bench, tmp_path) as run:
        until(lambda: run.rows("p2") > 3)
        whole = bench.text
        at = whole.index("[probe.p2]"), whole.index("[liquid.")
        bench.text = whole[: at[0]] + whole[at[1] :]
        bench.write("")
        run.process.send_signal(signal.SIGHUP)
        first = run.log("p2")
        until(lambda: first.read_text().endswith("end {}\n"))
        with pytest.raises(ControlError, match="tank 't2' has no probe; expected one of t1"):
            run.order("dose", {"tank": "t2", "liquid": "saline", "volume_ml": 5.0})
        bench.text = whole
        bench.write("")
        run.process.send_signal(signal.SIGHUP)
        until(lambda: run.log("p2") != first and run.rows("p2") > 3)
        assert run.rows() > 5
        assert run.end() == 0
        assert "Traceback" not in run.said
        assert "error of the program" not in run.said


def test_one_service_a_folder_and_one_a_bench_file(bench: OnPtys, tmp_path: Path) -> None:
    with running(bench, tmp_path) as run:
        second = Run(bench.path, run.logs, tmp_path)
        assert second.process.wait(15) == 1
        assert "a service already records here; stop it or choose --logs" in run.said
        third = Run(bench.path, tmp_path / "other", tmp_path)
        assert third.process.wait(15) == 1
        assert "a service already runs bench.toml" in run.said
        run.order("note", {"text": "the first one still answers"})
        assert "Traceback" not in run.said


def pull_and_put_back(bench: OnPtys, run: Run, n: int) -> None:
    """The n-th time."""
    before = run.rows()
    bench.do(lambda: bench.virtual.unplug("p1"))
    until(lambda: sum(e["link"] == "lost" for e in events(run.log(), "gap")) == n)
    assert run.rows() >= before
    bench.do(lambda: bench.virtual.plug("p1"))
    until(lambda: sum(e["link"] == "back" for e in events(run.log(), "gap")) == n + 1)
    until(lambda: run.rows() > before + 3)


def test_port_pulled_and_brought_back_ten_times(bench: OnPtys, tmp_path: Path) -> None:
    with running(bench, tmp_path) as run:
        for n in range(1, 11):
            pull_and_put_back(bench, run, n)
        assert run.process.poll() is None
        assert run.end() == 0
        gaps = [e["TIME"] for e in events(run.log(), "gap")][1:]
        t = times(run.log())
        for lost, back in zip(gaps[::2], gaps[1::2], strict=True):
            assert not [x for x in t if lost < x < back]
            assert lost - max(x for x in t if x <= lost) < 0.35  # 10 Hz: nothing missing before
            assert min(x for x in t if x >= back) - back < 0.35  # nor after
        assert run.told == replayed(run.log())

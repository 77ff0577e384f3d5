"""One hostile string through each door of the service: the wire, the folder of logs, the socket."""

from __future__ import annotations

import json
import random
import signal
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from drivers.virtual_tank.line_out import LineOut
from tests.service.running import OnPtys, Run, events, running, times, until
from tests.service.test_run import replayed

GOOD = b"512.5,24.50\r\n"
NOISE = {
    "escapes": b"\x1b[2J\x1b]0;owned\x07\x9b31m\r\n" * 50,
    "nul": b"\0" * 5000 + b"\n",
    "utf-16": "512.5,24.5\r\n".encode("utf-16") * 20,
    "full-width": "５１２.５\r\n".encode() * 20,
    "endless": b"9" * 300_000,
    "almost": b"nan\ninf\n1_000\n0x10\n-5\n1e9\n512.5,24.5,1\n512.5*00\n",
    "markup": b"<script>alert(1)</script>\n[bold red]x[/]\n=cmd|' /C calc'!A0\n",
    "log lines": b'#! 5.000 end {}\n# stillbrine log 1\n0.0,1.0\n#! 1.0 dose {"tank":"t1"}\n',
}


@contextmanager
def wired(tmp_path: Path) -> Iterator[tuple[LineOut, Run]]:
    """A service on a line that the test itself speaks on."""
    with OnPtys(tmp_path) as bench:
        assert bench.ports is not None
        line = LineOut(bench.ports / "raw")
        bench.text = bench.text.replace(str(bench.ports / "p1"), line.path)
        bench.write("")
        run = Run(bench.path, tmp_path / "logs", tmp_path)
        try:
            until(lambda: list(run.logs.glob("*.log")) and events(run.log(), "gap"), 20)
            time.sleep(3.2)  # what is said in the first seconds counts as boot text
            yield line, run
        finally:
            run.process.kill()
            run.process.wait()
            line.unplug()


def send(line: LineOut, data: bytes) -> None:
    """Put all of it on the line, no faster than it is taken."""
    for at in range(0, len(data), 1000):
        line.send(data[at : at + 1000])
        time.sleep(0.002)


def goes_on(line: LineOut, run: Run, noise: bytes) -> None:
    """After this noise good lines are recorded as before."""
    before = run.rows()
    send(line, noise)
    end = time.monotonic() + 10
    while run.rows() == before:
        send(line, b"\n" + GOOD)
        assert time.monotonic() < end


def test_nothing_on_the_wire_stops_it_or_reaches_a_terminal(tmp_path: Path) -> None:
    rng = random.Random(1)
    with wired(tmp_path) as (line, run):
        for name, noise in {**NOISE, "random": rng.randbytes(200_000)}.items():
            goes_on(line, run, noise)
            assert run.process.poll() is None, name
        status = run.order("status", {})["probes"]["p1"]
        assert status["rejected"] > 100
        assert run.end() == 0
        text = run.log().read_text("ascii")
        assert text.replace("\n", "").isprintable()
        for shown in (run.said, run.out.read_text()):
            assert shown.replace("\n", "").isprintable()
        assert text.count(" end {}") == 1
        assert not events(run.log(), "dose")
        assert "more lines were no reading" in run.said
        assert run.told == replayed(run.log())


HEAD = "# stillbrine log 1\n# probe: p1\n# started: 2026-01-01T00:00:00.000Z\n# part: 1\n"
HEAD += "time_s,period_us,temp_c\n"
BEFORE = {
    "noise": b"\x00\xff\x1b[2J" * 1000,
    "empty": b"",
    "head only": HEAD.encode(),
    "another version": b"# stillbrine log 999\n",
    "carried of other kinds": (
        HEAD
        + '#! 0.000 carried {"ledger": 5, "trust": [], "settling": "x", "silences": 7}\n1.0,5\n'
    ).encode(),
    "carried of the wrong kinds inside": (
        HEAD
        + '#! 0.000 carried {"ledger": {"doses": [1], "tank_ml": "much"}, "trust": {"faults": [3]},'
        ' "silences": {"\\u001b[2J": "for ever"}}\n1.0,500\n2.0,500\n'
    ).encode(),
    "carried that is endless": (HEAD + "#! 0.000 carried {" + '"a": {' * 5000 + "\n").encode(),
}


@pytest.mark.parametrize("before", list(BEFORE))
def test_what_lies_in_the_folder_of_logs_does_not_stop_it(tmp_path: Path, before: str) -> None:
    logs = tmp_path / "logs"
    logs.mkdir(mode=0o700)
    (logs / "p1-20260101T000000Z-001.log").write_bytes(BEFORE[before])
    (logs / "p1-\x1b[2J.log").write_text("x")
    with OnPtys(tmp_path) as bench, running(bench, tmp_path) as run:
        until(lambda: times(run.log())[-1] > 2.0)
        assert run.end() == 0
        assert run.said.replace("\n", "").isprintable()
        assert "Traceback" not in run.said
        assert run.told == replayed(run.log())


def test_the_socket_takes_no_nonsense_and_goes_on(tmp_path: Path) -> None:
    with OnPtys(tmp_path) as bench, running(bench, tmp_path) as run:
        (path,) = run.socket_folder.glob("*.sock")
        for order in (
            {"id": "a", "order": "note", "fields": {"text": "x", "by": {"a": 1}}},
            {"id": "b", "order": "dose", "probe": ["p1"], "fields": {"tank": {}}},
            {"id": "c", "order": "silence", "fields": {"what": "all", "until_utc": 5}},
            {"id": "d", "order": "calibration", "fields": {"set": {"x": 1}}},
            {"id": "e", "order": "answer", "fields": {"of": "x", "answer": "y", "more": [1e308]}},
            {"id": "f", "order": "note", "fields": {"text": "\ud800\x1b[2J"}},
            {"id": "g", "order": "strike", "fields": {"tank": "t1", "of": []}},
            {"id": "h", "order": "reload", "fields": {"path": "/etc/passwd"}},
        ):
            with socket.socket(socket.AF_UNIX) as to:
                to.settimeout(5)
                to.connect(str(path))
                to.sendall(json.dumps(order).encode() + b"\n")
                answer = json.loads(to.makefile().readline())
            assert answer["id"] == order["id"]
            assert isinstance(answer["ok"], bool)
        rows = run.rows()
        until(lambda: run.rows() > rows + 3)
        assert run.end() == 0
        assert "error of the program" not in run.said
        assert run.log().read_text("ascii").replace("\n", "").isprintable()


def test_a_process_that_stood_still_writes_the_gap(tmp_path: Path) -> None:
    with OnPtys(tmp_path) as bench, running(bench, tmp_path) as run:
        run.process.send_signal(signal.SIGSTOP)
        time.sleep(8.0)
        run.process.send_signal(signal.SIGCONT)
        until(lambda: [e for e in events(run.log(), "gap") if e.get("why") == "stalled"])
        rows = run.rows()
        until(lambda: run.rows() > rows + 3)
        assert run.end() == 0
        assert not [each for each in run.told if '"no-pulses"' in each]
        assert run.told == replayed(run.log())

"""`watch`, `demo` and `replay` as they are started: what runs, what is left when they end."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
import tty
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from monitor.commands.child import MAIN, status
from monitor.places import socket_path
from tests.screen import invented


@pytest.fixture(autouse=True)
def own_places(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    runtime = tmp_path / "run"
    runtime.mkdir(mode=0o700)
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(runtime))
    monkeypatch.setenv("XDG_DATA_HOME", str(tmp_path / "data"))
    monkeypatch.setenv("TMPDIR", str(tmp_path))


@pytest.fixture
def start() -> Iterator[Callable[..., subprocess.Popen[str]]]:
    begun: list[subprocess.Popen[str]] = []

    def make(*line: str) -> subprocess.Popen[str]:
        process = subprocess.Popen(
            [sys.executable, "-c", MAIN, *line],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        begun.append(process)
        return process

    yield make
    for process in begun:
        process.kill()
        process.communicate()


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[Path]:
    """A bench file whose one probe reads 900 us on a pseudo-terminal."""
    ours, theirs = os.openpty()
    tty.setraw(theirs)
    path = tmp_path / "bench.toml"
    path.write_text(invented.bench_text(port=os.ttyname(theirs)))
    ended = threading.Event()

    def speak() -> None:
        n = 0
        while not ended.wait(0.1):
            n += 1
            os.write(ours, b"%d.%d,25.0\r\n" % (899 + n % 3, 5 * (n % 2)))

    speaker = threading.Thread(target=speak)
    speaker.start()
    yield path
    ended.set()
    speaker.join()
    os.close(ours)
    os.close(theirs)


def read_until(process: subprocess.Popen[str], word: str, lines: int = 60) -> str:
    """What it prints up to the line that holds this word."""
    assert process.stdout is not None
    said = ""
    for _ in range(lines):
        line = process.stdout.readline()
        said += line
        if word in line or not line:
            break
    assert word in said, said + (process.communicate()[1] if process.poll() is not None else "")
    return said


def gone(socket: Path, within_s: float = 5.0) -> bool:
    """Whether no service answers there any more."""
    until = time.monotonic() + within_s
    while status(socket) is not None and time.monotonic() < until:
        time.sleep(0.05)
    return status(socket) is None


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT, signal.SIGHUP])
def test_watch_records_while_it_is_open(
    start: Callable[..., subprocess.Popen[str]],
    bench: Path,
    tmp_path: Path,
    number: signal.Signals,
) -> None:
    logs = tmp_path / "logs"
    watch = start("watch", "--bench", str(bench), "--logs", str(logs), "--plain")
    read_until(watch, "t1: 0.0")
    assert status(socket_path(bench)) is not None
    watch.send_signal(number)
    assert watch.wait(10) == 0
    assert gone(socket_path(bench))
    log = next(logs.glob("*.log")).read_text()
    assert log.splitlines()[-1].endswith("end {}")


def test_watch_leaves_a_service_alone_that_ran_before(
    start: Callable[..., subprocess.Popen[str]], bench: Path, tmp_path: Path
) -> None:
    logs = tmp_path / "elsewhere"
    run = start("run", "--bench", str(bench), "--logs", str(logs))
    until = time.monotonic() + 10
    while status(socket_path(bench)) is None and time.monotonic() < until:
        time.sleep(0.05)
    watch = start("watch", "--bench", str(bench), "--plain")
    read_until(watch, "t1: 0.0")
    watch.terminate()
    assert watch.wait(10) == 0
    assert status(socket_path(bench)) is not None
    assert len(list(logs.glob("*.log"))) == 1
    run.terminate()
    assert run.wait(10) == 0


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("[probe.p1]\n", "bench.toml: probe.p1.tank: missing"),
        (invented.bench_text(), "bench.toml: probe.p1.port: missing; expected a port to read"),
    ],
)
def test_watch_refuses_in_one_line(
    start: Callable[..., subprocess.Popen[str]], tmp_path: Path, text: str, said: str
) -> None:
    path = tmp_path / "bench.toml"
    path.write_text(text)
    watch = start("watch", "--bench", str(path))
    _, error = watch.communicate(timeout=20)
    assert watch.returncode == 2
    assert error.startswith(f"stillbrine: {said}")
    assert error.count("\n") == 1


def test_a_service_that_cannot_start_is_told_in_its_own_words(
    start: Callable[..., subprocess.Popen[str]], bench: Path, tmp_path: Path
) -> None:
    logs = tmp_path / "logs"
    logs.write_text("no folder")
    watch = start("watch", "--bench", str(bench), "--logs", str(logs), "--plain")
    _, error = watch.communicate(timeout=20)
    assert watch.returncode in (1, 2)
    assert "logs" in error
    assert error.count("\n") == 1


def test_demo_shows_invented_tanks_and_leaves_nothing(
    start: Callable[..., subprocess.Popen[str]], tmp_path: Path
) -> None:
    demo = start("demo", "--plain", "--speed", "10")
    said = read_until(demo, "dose running in")
    assert said.startswith("DEMO: tanks, probes and doses are invented\n")
    assert "north tank (invented): 0.0" in said
    (folder,) = tmp_path.glob("stillbrine-demo-*")
    socket = socket_path(folder / "demo.toml")
    demo.terminate()
    assert demo.wait(10) == 0
    assert gone(socket)
    assert not list(tmp_path.glob("stillbrine-demo-*"))


def test_a_demo_that_was_killed_is_cleaned_up_by_its_service(
    start: Callable[..., subprocess.Popen[str]], tmp_path: Path
) -> None:
    demo = start("demo", "--plain")
    read_until(demo, "tank")
    demo.kill()
    until = time.monotonic() + 10
    while list(tmp_path.glob("stillbrine-demo-*")) and time.monotonic() < until:
        time.sleep(0.05)
    assert not list(tmp_path.glob("stillbrine-demo-*"))


def test_a_recording_is_read_aloud_where_there_is_no_screen(
    start: Callable[..., subprocess.Popen[str]], tmp_path: Path
) -> None:
    log = invented.saved(tmp_path, invented.log_text(invented.bench(label="north"), length_s=90.0))
    replay = start("replay", log, "--speed", "3600")
    out, error = replay.communicate(timeout=20)
    assert (replay.returncode, error) == (0, "")
    assert out.startswith("a recording is played\n")
    assert "north: 0.0" in out


@pytest.mark.parametrize("speed", ["0", "-1", "nan", "1e9"])
def test_a_speed_that_is_none_is_refused(
    start: Callable[..., subprocess.Popen[str]], tmp_path: Path, speed: str
) -> None:
    log = invented.saved(tmp_path, invented.log_text(invented.bench(), length_s=20.0))
    replay = start("replay", log, "--speed", speed)
    _, error = replay.communicate(timeout=20)
    assert replay.returncode == 2
    assert error.startswith("stillbrine: --speed:")
    assert error.count("\n") == 1


def test_another_bench_is_played_beside_and_named(
    start: Callable[..., subprocess.Popen[str]], tmp_path: Path
) -> None:
    log = invented.saved(tmp_path, invented.log_text(invented.bench(label="north"), length_s=90.0))
    other = tmp_path / "other.toml"
    other.write_text(invented.bench_text(label="north"))
    replay = start("replay", log, "--against", str(other), "--speed", "3600")
    out, error = replay.communicate(timeout=20)
    assert (replay.returncode, error) == (0, "")
    assert out.startswith("a recording is played; B: other.toml\n")
    assert "B: north: 0.0" in out
    replay = start("replay", log, "--against", str(other), "--beside", log)
    assert "expected one of them" in replay.communicate(timeout=20)[1]
    assert replay.returncode == 2

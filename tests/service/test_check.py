"""`check` and `ports` on real pseudo-terminals: what a port says, or why it says nothing."""

from __future__ import annotations

import errno
import os
import pty
import sys
import threading
import time
import tty
from collections.abc import Iterator
from pathlib import Path

import pytest
import serial

from drivers.serial_port import Plugged
from monitor import cli
from monitor.commands.listening import heard
from tests.service.running import OnPtys, running

LISTEN_S = 0.6


class Board:
    """A microcontroller behind a pseudo-terminal: says `boot` once, then `lines` at 50 Hz."""

    def __init__(self) -> None:
        self.near, far = pty.openpty()
        tty.setraw(far)
        self.far = far
        self.path = os.ttyname(far)
        self.line = b""
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._talk)
        self._thread.start()

    def _talk(self) -> None:
        os.set_blocking(self.near, False)
        while not self._over.wait(0.02):
            try:
                os.write(self.near, self.line)
            except BlockingIOError:
                pass  # nobody listens

    def close(self) -> None:
        self._over.set()
        self._thread.join()
        os.close(self.near)
        os.close(self.far)


@pytest.fixture
def board() -> Iterator[Board]:
    made = Board()
    yield made
    made.close()


def listen(board: Board) -> str:
    said = heard(board.path, 115200, LISTEN_S)
    assert "\n" not in said
    return said


def test_a_port_that_reads_well(board: Board) -> None:
    board.line = b"585.5,24.98\n"
    said = listen(board)
    assert said.endswith("readings/s, the last 585.5 us at 24.98 C")
    assert 5 < float(said.split()[0]) < 60


def test_a_silent_port(board: Board) -> None:
    assert "opened, but silent: is the microcontroller running" in listen(board)


def test_bytes_that_are_no_reading_are_shown_in_hex(board: Board) -> None:
    board.line = b"\xf8\x80\x1b\xff"
    said = listen(board)
    assert said.startswith("bytes but no reading: wrong baud? first bytes f8 80 1b ff f8")
    assert "\x1b" not in said


def test_boot_text_and_an_error_value_of_the_thermometer_are_said(board: Board) -> None:
    board.line = b"585.5,-127\n"
    booting = threading.Timer(0.3, os.write, (board.near, b"Booting v1\nsensor ok\nready\n"))
    booting.start()
    said = listen(board)
    booting.join()
    assert "readings/s, the last 585.5 us;" in said
    assert "-127 is an error value of the thermometer" in said
    assert "lines at the start were none: a board that starts anew" in said


def test_a_port_that_is_busy_names_the_program(board: Board, tmp_path: Path) -> None:
    ready, done = os.pipe(), os.pipe()
    child = os.fork()
    if child == 0:
        held = serial.Serial(board.path, exclusive=True)
        os.write(ready[1], b"x")
        os.read(done[0], 1)
        held.close()
        os._exit(0)
    try:
        os.read(ready[0], 1)
        said = listen(board)
    finally:
        os.write(done[1], b"x")
        os.waitpid(child, 0)
    assert f"{board.path}: busy, " in said
    assert f"(process {child}) reads it; close that one" in said


@pytest.mark.parametrize(
    ("number", "said"),
    [
        (errno.EACCES, "permission refused; join its group with 'sudo usermod -aG"),
        (errno.ENOENT, "not there; plug it in"),
        (errno.EIO, "cannot be read as a serial port (Input/output error)"),
    ],
)
def test_a_port_that_does_not_open(
    board: Board, number: int, said: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(self: serial.Serial) -> None:
        raise serial.SerialException(number, os.strerror(number))

    monkeypatch.setattr(serial.Serial, "open", refuse)
    assert f"{board.path}: {said}" in listen(board)


def test_what_can_be_no_port() -> None:
    assert "expected /dev/... or socket://host:port" in heard("file:///etc/passwd", 9600, 0.1)


def call(monkeypatch: pytest.MonkeyPatch, *words: object) -> int:
    monkeypatch.setattr(sys, "argv", ["stillbrine", *map(str, words)])
    with pytest.raises(SystemExit) as ended:
        cli.main()
    return int(ended.value.code or 0)


BENCH = """
[probe.p1]
tank = "t1"
port = "{port}"
[probe.p2]
tank = "t1"
port = "/dev/ttyNONE0"
[tank.t1]
rest_band_pct = 0.001
"""


def test_check_says_what_each_port_says_and_what_the_night_would_hide(
    board: Board,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    board.line = b"585.5,24.98\n"
    path = tmp_path / "b.toml"
    path.write_text(BENCH.format(port=board.path))
    assert call(monkeypatch, "check", path, "--listen", LISTEN_S) == 1
    said = capsys.readouterr()
    assert "1 of the above would keep it from running" in said.err
    lines = said.out.splitlines()
    assert sum(line.startswith("NO ") for line in lines) == 1
    for text in (
        "ok  probe p1: no standards: faults and gaps, but no salinity yet",
        f"ok  probe p1: {board.path}: ",
        "NO  probe p2: /dev/ttyNONE0: /dev/ttyNONE0: not there; plug it in",
        "/dev/ttyNONE0 may become another probe's at a reboot; use its name below",
        "tank t1: no volume_ml: doses cannot be predicted",
        "tank t1: no aim_pct: nothing tells",
        "no [alarm.*] reaches a person away from the screen",
        "a power cut or a dead machine would not be noticed",
    ):
        assert any(text in line for line in lines), text


def test_check_is_quiet_about_what_is_seen_to(
    board: Board,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    board.line = b"585.5,24.98\n"
    secret = tmp_path / "beat"
    secret.write_text("http://localhost/beat")
    secret.chmod(0o600)
    path = tmp_path / "b.toml"
    path.write_text(
        f'[probe.p1]\ntank = "t1"\nport = "{board.path}"\n'
        "[tank.t1]\nrest_band_pct = 0.001\nvolume_ml = 900.0\naim_pct = [0.09, 0.11]\n"
        "fastest_pct_per_h = 0.02\n"
        f'[alarm.night]\ncommand = ["/bin/true"]\nheartbeat_url_file = "{secret}"\n'
    )
    path.chmod(0o600)
    assert call(monkeypatch, "check", path, "--listen", LISTEN_S) == 0
    said = capsys.readouterr().out
    assert "NO " not in said
    for text in ("aim_pct", "volume_ml", "power cut", "away from the screen", "by-id"):
        assert text not in said


def test_a_disk_that_may_not_last_the_night_is_said(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "b.toml"
    path.write_text(BENCH.format(port="/dev/ttyNONE1"))
    monkeypatch.setattr("shutil.disk_usage", lambda _: type("Usage", (), {"free": 30_000_000}))
    call(monkeypatch, "check", path, "--listen", 0)
    assert "disk: 30 MB free below" in capsys.readouterr().out


def test_check_beside_a_running_service_does_not_call_its_port_busy(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    with OnPtys(tmp_path) as bench, running(bench, tmp_path):
        assert call(monkeypatch, "check", bench.path) == 0
        assert "read by the service that runs" in capsys.readouterr().out


def test_ports_lists_by_the_name_that_survives_and_listens(
    board: Board, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    board.line = b"585.5,24.98\n"
    found = [Plugged(board.path, "/dev/serial/by-id/usb-invented-if00", "invented board")]
    monkeypatch.setattr("drivers.serial_port.plugged", lambda: found)
    assert call(monkeypatch, "ports", "--listen", LISTEN_S) == 0
    name, said = capsys.readouterr().out.splitlines()
    assert name == "/dev/serial/by-id/usb-invented-if00  invented board"
    assert "readings/s" in said
    monkeypatch.setattr("drivers.serial_port.plugged", list)
    assert call(monkeypatch, "ports") == 0
    assert "No serial port is plugged in." in capsys.readouterr().out


def test_a_long_silence_is_not_waited_for(board: Board) -> None:
    began = time.monotonic()
    heard(board.path, 115200, 0.2)
    assert time.monotonic() - began < 5

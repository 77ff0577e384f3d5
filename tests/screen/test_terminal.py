"""On a real pseudo-terminal: however it ends, the terminal is as it was before."""

from __future__ import annotations

import fcntl
import os
import pty
import select
import signal
import struct
import subprocess
import sys
import termios
import time
from pathlib import Path

import pytest

from tests.screen import invented

RUN = "from monitor.cli import main; main()"
WAIT_S = 30.0
UNDONE = {  # what was switched on, and what switches it off again
    b"\x1b[?1049h": b"\x1b[?1049l",  # the other screen
    b"\x1b[?1000h": b"\x1b[?1000l",  # the mouse
    b"\x1b[?25l": b"\x1b[?25h",  # no cursor
}


def read_until(fd: int, said: bytes, wanted: bytes | None) -> bytes:
    """What the terminal was sent, until `wanted` is in it, or its end."""
    end = time.monotonic() + WAIT_S
    while time.monotonic() < end and (wanted is None or wanted not in said):
        if select.select([fd], [], [], 0.1)[0]:
            try:
                data = os.read(fd, 65536)
            except OSError:
                return said
            if not data:
                return said
            said += data
    return said


@pytest.mark.parametrize("way", ["q", signal.SIGINT, signal.SIGTERM, signal.SIGHUP], ids=str)
def test_it_leaves_the_terminal_as_it_was(way: str | signal.Signals, tmp_path: Path) -> None:
    log = invented.saved(tmp_path, invented.log_text(invented.bench(), length_s=60.0))
    ours, theirs = pty.openpty()
    fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
    before = termios.tcgetattr(theirs)
    env = {**os.environ, "TERM": "xterm-256color", "COLORTERM": "truecolor"}
    with subprocess.Popen(
        [sys.executable, "-c", RUN, "replay", log],
        stdin=theirs,
        stdout=theirs,
        stderr=theirs,
        env=env,
        start_new_session=True,
    ) as program:
        try:
            said = read_until(ours, b"", b"by mass")
            assert b"by mass" in said
            time.sleep(0.3)  # past its start, where a signal still has its plain meaning
            if isinstance(way, str):
                os.write(ours, way.encode())
            else:
                program.send_signal(way)
            said = read_until(ours, said, UNDONE[b"\x1b[?1000h"])
            assert program.wait(WAIT_S) == 0
        finally:
            program.kill()
    said += read_until(ours, b"", b"\x1b[?25h") if b"\x1b[?25h" not in said[-2000:] else b""
    for done, undone in UNDONE.items():
        assert said.rfind(undone) > said.rfind(done)
    assert b"Traceback" not in said
    assert termios.tcgetattr(theirs) == before
    os.close(theirs)
    os.close(ours)

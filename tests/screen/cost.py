"""What the screen costs: `python -m tests.screen.cost [LANES] [READINGS_PER_S] [SPEED]`.

Plays invented logs on a pseudo-terminal of 120x40 and prints: time to the first picture, share of a
core while nobody touches it, and the time from a key to the redraw that it causes. The judging of
all lanes is part of the process and so of the figures.
"""

from __future__ import annotations

import fcntl
import os
import pty
import random
import select
import signal
import struct
import sys
import tempfile
import termios
import time
from pathlib import Path

import numpy as np

from tests.screen import invented

RUN = "from monitor.cli import main; main()"
CALM_S, KEYS = 20.0, 60
CHOSEN = "▶".encode()


def logs(folder: Path, lanes: int, rate_hz: float) -> list[str]:
    """Logs of still tanks, long enough for the measurement."""
    invented.RATE_HZ = rate_hz
    settings = invented.bench(lanes)
    return [
        invented.saved(folder, invented.log_text(settings, f"p{i}", 400.0, seed=i), f"p{i}")
        for i in range(1, lanes + 1)
    ]


class Terminal:
    """A program on a pseudo-terminal."""

    def __init__(self, arguments: list[str]) -> None:
        self.pid, self.fd = pty.fork()
        if not self.pid:
            os.environ.update(TERM="xterm-256color", COLORTERM="truecolor")
            os.execv(sys.executable, [sys.executable, "-c", RUN, *arguments])
        fcntl.ioctl(self.fd, termios.TIOCSWINSZ, struct.pack("HHHH", 40, 120, 0, 0))

    def until(self, wanted: bytes, most_s: float) -> float:
        """Seconds until this was sent; `most_s` if it was not."""
        begun, said = time.monotonic(), b""
        while (passed := time.monotonic() - begun) < most_s:
            if select.select([self.fd], [], [], most_s - passed)[0]:
                said += os.read(self.fd, 1 << 16)
                if wanted and wanted in said:
                    return time.monotonic() - begun
        return most_s

    def cpu_s(self) -> float:
        """Processor time that it took so far."""
        fields = Path(f"/proc/{self.pid}/stat").read_text().rpartition(")")[2].split()
        return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def main(lanes: int, rate_hz: float, speed: float) -> None:
    """Measure and print."""
    with tempfile.TemporaryDirectory() as made:
        paths = logs(Path(made), lanes, rate_hz)
        terminal = Terminal(["replay", *paths, "--speed", f"{speed:g}"])
        print(f"first picture after {terminal.until(b'by mass', 60.0):.2f} s")
        terminal.until(b"", 5.0)
        before, begun = terminal.cpu_s(), time.monotonic()
        terminal.until(b"", CALM_S)
        share = (terminal.cpu_s() - before) / (time.monotonic() - begun)
        print(
            f"{lanes} lanes, {rate_hz:g} readings/s, speed {speed:g}: {100 * share:.1f} % of a core"
        )
        waits = []
        for i in range(KEYS):
            terminal.until(b"", random.uniform(0.05, 0.4))
            os.write(terminal.fd, b"\x1b[A" if i % 2 else b"\x1b[B")
            waits.append(terminal.until(CHOSEN, 3.0))
        p50, p95 = np.percentile(waits, (50, 95))
        print(f"key to redraw: median {1e3 * p50:.0f} ms, p95 {1e3 * p95:.0f} ms")
        os.kill(terminal.pid, signal.SIGTERM)


if __name__ == "__main__":
    given = [float(each) for each in sys.argv[1:]]
    lanes, rate, speed = [*given, *(16.0, 100.0, 1.0)[len(given) :]]
    main(int(lanes), rate, speed)

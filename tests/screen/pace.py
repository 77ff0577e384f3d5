"""How much the screen costs and how fast it answers: `python -m tests.screen.pace`.

16 virtual probes at 100 readings/s, a service that records them, and `watch` in a terminal of
120 x 40 that is a pseudo-terminal of ours. Printed: start to the first full picture, CPU time of
the watching process, key to redraw. Everything is invented and removed in the end.
"""

from __future__ import annotations

import argparse
import contextlib
import fcntl
import os
import re
import select
import struct
import subprocess
import sys
import tempfile
import termios
import time
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from monitor.commands.child import MAIN, status
from monitor.places import socket_path
from tests.screen import invented

HEADS = (b"g/kg", b"mS/cm", b"% by mass")
TICKS = os.sysconf("SC_CLK_TCK")


class Terminal:
    """A pseudo-terminal with a program in it."""

    def __init__(
        self, line: list[str], columns: int, rows: int, env: Mapping[str, str] | None = None
    ) -> None:
        self.ours, self._theirs = os.openpty()
        fcntl.ioctl(self._theirs, termios.TIOCSWINSZ, struct.pack("4H", rows, columns, 0, 0))
        whole = {**os.environ, "TERM": "xterm-256color", "COLORTERM": "truecolor", **(env or {})}
        self._ends = [self.ours, self._theirs]
        self.drawn = b""
        self.began = time.monotonic()
        self.process = subprocess.Popen(
            line,
            stdin=self._theirs,
            stdout=self._theirs,
            stderr=self._theirs,
            env=whole,
            start_new_session=True,
        )

    @property
    def settings(self) -> list[Any]:
        """The terminal's settings, as `stty` has them."""
        return termios.tcgetattr(self._theirs)

    def close(self) -> None:
        """Give the pseudo-terminal back."""
        for each in self._ends:
            os.close(each)
        self._ends = []

    def read(self, until: float, words: tuple[bytes, ...] = ()) -> tuple[int, float | None]:
        """Take what it draws until then, or one of these words: bytes, and when that was."""
        n, tail = 0, b""
        while (left := until - time.monotonic()) > 0:
            if not select.select([self.ours], [], [], min(left, 0.1))[0]:
                if self.process.poll() is not None:
                    break
                continue
            data = os.read(self.ours, 65536)
            self.drawn += data
            n += len(data)
            tail = tail[-64:] + data
            if any(word in tail for word in words):
                return n, time.monotonic()
        return n, None

    def cpu_s(self) -> float:
        """CPU time of the program so far."""
        fields = Path(f"/proc/{self.process.pid}/stat").read_text().rpartition(")")[2].split()
        return (int(fields[11]) + int(fields[12])) / TICKS


@contextlib.contextmanager
def bench(folder: Path, probes: int, rate_hz: float) -> Iterator[Path]:
    """A bench file whose probes speak, and a service that records them."""
    path = folder / "pace.toml"
    text = invented.bench_text(probes).replace("tick_us", f"rate_hz = {rate_hz}\ntick_us")
    path.write_text(text)
    tank = subprocess.Popen(
        [sys.executable, "-m", "drivers.virtual_tank", "--bench", str(path)],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        text=True,
    )
    assert tank.stdout is not None
    for _ in range(probes):
        name, port = re.findall(r'\[probe\.(\w+)\] port = "(.*)"', tank.stdout.readline())[0]
        text = text.replace(f"[probe.{name}]\n", f'[probe.{name}]\nport = "{port}"\n')
    path.write_text(text)
    logs = str(folder / "logs")
    run = subprocess.Popen(
        [sys.executable, "-c", MAIN, "run", "--bench", str(path), "--logs", logs],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    try:
        while status(socket_path(path)) is None:
            time.sleep(0.05)
        yield path
    finally:
        for process in (run, tank):
            process.terminate()
            process.wait()


def measure(terminal: Terminal, seconds: float, keys: int) -> None:
    """Print the figures of the watching process in this terminal."""
    _, shown = terminal.read(terminal.began + 20, (b" quit",))
    if shown is None:
        raise SystemExit("no picture within 20 s")
    passed, cpu = shown - terminal.began, terminal.cpu_s()
    print(f"start to first picture  {passed:.2f} s, of them {cpu:.2f} s of its own CPU time")
    terminal.read(time.monotonic() + 5)
    before, began = terminal.cpu_s(), time.monotonic()
    n, _ = terminal.read(began + seconds)
    passed = time.monotonic() - began
    share = (terminal.cpu_s() - before) / passed
    print(f"watching                {100 * share:.1f} % of a core, {n / passed / 1000:.1f} kB/s")
    waits = []
    for i in range(keys):
        os.write(terminal.ours, b"u")
        sent = time.monotonic()
        _, seen = terminal.read(sent + 3, (HEADS[i % 3],))
        waits.append((seen or sent + 3) - sent)
        terminal.read(time.monotonic() + 0.137)
    waits.sort()
    p50, p95 = waits[len(waits) // 2], waits[int(0.95 * len(waits))]
    print(
        f"key to redraw           p50 {1000 * p50:.0f} ms, p95 {1000 * p95:.0f} ms of {keys} keys"
    )
    os.write(terminal.ours, b"q")
    terminal.read(time.monotonic() + 2)
    print(f"exit code               {terminal.process.wait(5)}")


def main() -> None:
    """Entry point."""
    ask = argparse.ArgumentParser(description="What the screen costs.")
    ask.add_argument("--probes", type=int, default=16)
    ask.add_argument("--rate", type=float, default=100.0)
    ask.add_argument("--seconds", type=float, default=30.0)
    ask.add_argument("--keys", type=int, default=100)
    given = ask.parse_args()
    with tempfile.TemporaryDirectory(prefix="stillbrine-pace-") as folder:
        os.environ["XDG_RUNTIME_DIR"] = folder
        with bench(Path(folder), given.probes, given.rate) as path:
            line = [sys.executable, "-c", MAIN, "watch", "--bench", str(path)]
            terminal = Terminal([*line, "--logs", str(Path(folder) / "logs")], 120, 40)
            try:
                measure(terminal, given.seconds, given.keys)
            finally:
                terminal.process.kill()


if __name__ == "__main__":
    main()

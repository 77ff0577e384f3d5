"""The service as a process of its own, on a virtual bench that speaks through pseudo-terminals."""

from __future__ import annotations

import asyncio
import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np

from drivers.virtual_tank import bench_text
from drivers.virtual_tank.bench import VirtualBench
from drivers.virtual_tank.line_out import shelf
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank
from monitor.blocks import Block
from monitor.clock import HostClock
from monitor.control import give_now
from monitor.logbook.parser import Parser

MAIN = "from monitor.cli import main; main()"


class OnPtys:
    """A virtual bench in a thread of its own, and the bench file that belongs to it."""

    def __init__(self, folder: Path, probes: int = 1, rate_hz: float = 10.0) -> None:
        rng = np.random.default_rng(4)
        liquids = {name: pct for name, (pct, _) in bench_text.LIQUIDS.items()}
        self.virtual = VirtualBench(HostClock(), liquids)
        self.ports = shelf(f"test-{os.getpid()}-{folder.name}")
        self.path = folder / "bench.toml"
        self.text = ""
        for i in range(1, probes + 1):
            tank = self.virtual.tanks[f"t{i}"] = Tank(0.08, 1200.0, Mixing(tau_s=6.0), rng)
            probe = Probe(tank, Climate(24.5), rng, Circuit(), tick_us=0.5, rate_hz=rate_hz)
            port = self.virtual.hang(f"p{i}", probe, self.ports)
            self.text += bench_text.probe_text(f"p{i}", f"t{i}", probe, rng, port)
            self.text += bench_text.tank_text(f"t{i}", 1200.0, "grows", 0.001)
        self.text += bench_text.liquids_text(bench_text.LIQUIDS)
        self.write("")
        self._loop = asyncio.new_event_loop()
        self._serving = self._loop.create_task(self.virtual.run())
        self._thread = threading.Thread(target=self._serve)

    def write(self, more: str) -> None:
        """The bench file with further tables."""
        self.path.write_text(self.text + more)
        self.path.chmod(0o600)

    def _serve(self) -> None:
        asyncio.set_event_loop(self._loop)
        try:
            self._loop.run_until_complete(self._serving)
        except asyncio.CancelledError:
            pass
        self._loop.close()

    def do(self, act: Callable[[], Any]) -> None:
        """Carry out an act on the bench."""
        done = threading.Event()
        self._loop.call_soon_threadsafe(act)
        self._loop.call_soon_threadsafe(done.set)
        assert done.wait(5)

    def __enter__(self) -> OnPtys:
        self._thread.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        wrong: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._loop.call_soon_threadsafe(self._serving.cancel)
        self._thread.join()
        if self.ports is not None:
            self.ports.rmdir()


class Run:
    """`stillbrine run` as a child process; its output goes to files."""

    def __init__(self, bench: Path, logs: Path, where: Path, piped: bool = False) -> None:
        """`piped`: findings go to the process's pipe, not to a file."""
        self.logs = logs
        self.out, self.err = where / "out.jsonl", where / "err.txt"
        self.environ = {**os.environ, "XDG_RUNTIME_DIR": str(where)}
        self.socket_folder = where / "stillbrine"
        line = [sys.executable, "-c", MAIN, "run", "--bench", str(bench), "--logs", str(logs)]
        with self.out.open("ab") as out, self.err.open("ab") as err:
            to = subprocess.PIPE if piped else out
            self.process = subprocess.Popen(line, stdout=to, stderr=err, env=self.environ)

    @property
    def said(self) -> str:
        """All messages up to now."""
        return self.err.read_text()

    @property
    def told(self) -> list[str]:
        """All findings up to now, but for those that take more than one probe."""
        lines = self.out.read_text().splitlines()
        return [each for each in lines if '"unwatched"' not in each]

    def log(self, probe: str = "p1") -> Path:
        """The newest log of a probe."""
        return sorted(self.logs.glob(f"{probe}-*.log"))[-1]

    def rows(self, probe: str = "p1") -> int:
        """Rows in the newest log."""
        found = sorted(self.logs.glob(f"{probe}-*.log"))
        return (
            sum(line[:1].isdigit() for line in found[-1].read_bytes().splitlines()) if found else 0
        )

    def order(self, kind: str, fields: dict[str, Any], **more: Any) -> dict[str, Any]:
        """Give an order. Raises ControlError."""
        (socket,) = self.socket_folder.glob("*.sock")
        return give_now(socket, kind, fields, **more)

    def ready(self) -> Run:
        """Wait until the first readings are in the log."""
        until(lambda: self.rows() > 3, 15.0)
        return self

    def end(self, number: int = signal.SIGTERM) -> int:
        """Send a signal and wait; the exit code."""
        self.process.send_signal(number)
        return self.process.wait(15)


@contextmanager
def running(bench: OnPtys, where: Path, logs: Path | None = None) -> Iterator[Run]:
    """A service that reads, ended with the block if it still runs."""
    run = Run(bench.path, logs or where / "logs", where)
    try:
        yield run.ready()
    finally:
        if run.process.poll() is None:
            run.process.kill()
            run.process.wait()


def until(holds: Callable[[], object], limit_s: float = 10.0) -> None:
    """Wait until this holds."""
    end = time.monotonic() + limit_s
    while not holds():
        assert time.monotonic() < end, f"not within {limit_s:g} s"
        time.sleep(0.02)


def events(path: Path, kind: str) -> list[dict[str, Any]]:
    """The events of this kind in a log, with their TIME."""
    found = []
    for line in path.read_text().splitlines():
        if line.startswith("#! ") and line.split(" ")[2] == kind:
            found.append({"TIME": float(line.split(" ")[1]), **json.loads(line.split(" ", 3)[3])})
    return found


def times(path: Path) -> list[float]:
    """Times of the rows of a log."""
    blocks = [item for item in Parser().feed(path.read_bytes()) if isinstance(item, Block)]
    return [float(t) for block in blocks for t in block.time_s]

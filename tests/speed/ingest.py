"""How many lines a second the service takes: `python -m tests.speed.ingest [PORTS RATE_HZ S]`.

Pseudo-terminals speak at line rate into a service of its own process. Printed: rows sent and rows
in the logs, the service's share of a core, and how long after the first byte past a second's end
its findings left the service (by default 16 ports, 2304 lines a second each, 40 s).
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
import threading
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from drivers.virtual_tank import bench_text
from drivers.virtual_tank.line_out import LineOut, shelf
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank
from monitor.logbook.reader import read_header
from tests.service.running import Run, times, until

CHUNK_S = 0.01  # what a USB adapter hands over at once
DOSE_S = 4.0  # when a dose begins
TAU_S = 8.0
WARM_S = 2.0
TICKS = os.sysconf("SC_CLK_TCK")


@dataclass
class Wire:
    """One port and all the bytes that are to go through it."""

    line: LineOut
    data: bytes
    ends: np.ndarray  # where each line of `data` ends
    sent: int = 0


def wires(ports: int, rate_hz: float, seconds: float, folder: Path) -> tuple[list[Wire], str]:
    """Ports with what they will say, and the bench file that belongs to them."""
    rng = np.random.default_rng(2)
    made, text = [], bench_text.liquids_text(bench_text.LIQUIDS)
    t = np.arange(int(rate_hz * seconds)) / rate_hz
    share = np.where(t > DOSE_S, 1.0 - np.exp(-(t - DOSE_S) / TAU_S), 0.0)
    for n in range(ports):
        tank = Tank(0.08, 1200.0, Mixing(tau_s=TAU_S), rng)
        probe = Probe(tank, Climate(25.0), rng, Circuit(), tick_us=1.0, rate_hz=rate_hz)
        line = LineOut(folder / f"p{n}")
        text += bench_text.probe_text(f"p{n}", f"t{n}", probe, rng, line.path)
        text += bench_text.tank_text(f"t{n}", 1200.0, "grows", 0.001)
        period = probe.circuit.period_us(0.08 + 0.0058 * share, np.full(len(t), 25.0))
        period *= 1.0 + 0.002 * rng.standard_normal(len(t))
        lines = [b"%d\r\n" % value for value in np.rint(period).astype(int)]
        made.append(Wire(line, b"".join(lines), np.cumsum([len(each) for each in lines])))
    return made, text


def speak(these: list[Wire], rate_hz: float, seconds: float) -> None:
    """Put everything on the wires, each line at its time."""
    began = time.monotonic()
    while (passed := time.monotonic() - began) < seconds + CHUNK_S:
        due = min(int(passed * rate_hz), int(seconds * rate_hz))
        for wire in these:
            if due > wire.sent:
                first = int(wire.ends[wire.sent - 1]) if wire.sent else 0
                wire.line.send(wire.data[first : int(wire.ends[due - 1])])
                wire.sent = due
        time.sleep(CHUNK_S)


def heard_of(process: subprocess.Popen[bytes], told: list[tuple[float, dict[str, Any]]]) -> None:
    """Keep each finding with the moment it arrived, until the service ends."""
    assert process.stdout is not None
    with process.stdout as lines:
        for line in lines:
            told.append((time.clock_gettime(time.CLOCK_BOOTTIME), json.loads(line)))


def cpu_s(pid: int) -> float:
    """Processor time of a process so far, its threads together."""
    fields = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()
    return (int(fields[11]) + int(fields[12])) / TICKS


def late_s(logs: Path, told: list[tuple[float, dict[str, Any]]]) -> list[float]:
    """For each finding, how long after the first row past its second it was heard."""
    zero = time.clock_gettime(time.CLOCK_BOOTTIME) - time.time()
    late = []
    rows: dict[str, tuple[float, list[float]]] = {}
    for heard_s, finding in told:
        probe = finding.get("probe")
        if probe is None:
            continue
        if probe not in rows:
            (path,) = logs.glob(f"{probe}-*.log")
            header = read_header(path)
            assert header is not None
            rows[probe] = header.started.timestamp() + zero, times(path)
        began_s, its = rows[probe]
        at = int(np.searchsorted(its, finding["t"]))
        if at < len(its):
            late.append(heard_s - (began_s + its[at]))
    return late


def measure(ports: int, rate_hz: float, seconds: float) -> dict[str, float]:
    """One run; the figures."""
    folder = shelf(f"ingest-{os.getpid()}")
    assert folder is not None, "no folder below /dev for the links of the ports"
    with tempfile.TemporaryDirectory() as name:
        where = Path(name)
        these, text = wires(ports, rate_hz, seconds, folder)
        bench = where / "bench.toml"
        bench.write_text(text)
        run = Run(bench, where / "logs", where, piped=True)
        told: list[tuple[float, dict[str, Any]]] = []
        hearing = threading.Thread(target=heard_of, args=(run.process, told))
        hearing.start()
        try:
            until(lambda: len(list(run.logs.glob("*.log"))) == ports, 60)
            until(lambda: all('"back"' in p.read_text() for p in run.logs.glob("*.log")), 60)
            before, began = cpu_s(run.process.pid), time.monotonic()
            dosing = threading.Timer(DOSE_S, _dose, (run, ports))
            dosing.start()
            speak(these, rate_hz, seconds)
            dosing.join()
            used = cpu_s(run.process.pid) - before
            passed = time.monotonic() - began
            time.sleep(0.5)
            assert run.end() == 0, run.said
        finally:
            run.process.kill()
            hearing.join()
            for wire in these:
                wire.line.unplug()
            folder.rmdir()
        kept = sum(len(times(path)) for path in run.logs.glob("*.log"))
        late = sorted(late_s(run.logs, told))
    return {
        "ports": ports,
        "rate_hz": rate_hz,
        "rows_sent": sum(wire.sent for wire in these),
        "rows_in_logs": kept,
        "bytes_nobody_took": sum(wire.line.dropped_bytes for wire in these),
        "cpu_share": round(used / passed, 4),
        "findings": len(late),
        "late_p50_ms": round(1e3 * late[len(late) // 2], 1),
        "late_p99_ms": round(1e3 * late[min(int(0.99 * len(late)), len(late) - 1)], 1),
        "load": round(os.getloadavg()[0], 1),
    }


def _dose(run: Run, ports: int) -> None:
    for n in range(ports):
        fields = {"tank": f"t{n}", "liquid": "saline", "volume_ml": 108.0, "open_s": 2.0}
        run.order("dose", fields)


def main() -> None:
    """Measure and print."""
    given = [float(word) for word in sys.argv[1:4]]
    ports, rate_hz, seconds = [*given, *[16.0, 2304.0, 40.0][len(given) :]]
    print(json.dumps(measure(int(ports), rate_hz, seconds)))


if __name__ == "__main__":
    main()

"""Kill -9 at random moments under load: `python -m tests.soak.kill [N]`, 200 by default.

Each round starts the service on the same folder, records a dose, kills it at a random moment and
looks at what is in the log. It fails at the first figure that is not reached.
"""

from __future__ import annotations

import itertools
import json
import os
import random
import signal
import sys
import tempfile
import time
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from monitor.control import ControlError
from monitor.logbook.parser import Parser
from monitor.logbook.reader import read_header
from tests.service.running import OnPtys, Run, events, times, until

RATE_HZ = 400.0
LOST_S = 2.0  # of rows, at most
READING_S = 3.0  # from the start of the process to a row in the log
DOSE_ML = 1.0


@dataclass
class Round:
    """What one kill did."""

    reading_s: float  # from the start to the first row
    lost_s: float  # rows missing before the kill
    hole_s: float  # longest time between rows before that
    torn: int


def kill(bench: OnPtys, where: Path, alive_s: float, dosed: int) -> Round:
    """One round. `dosed`: doses recorded in the rounds before. AssertionError if it is not met."""
    logs = where / "logs"
    before = set(logs.glob("p1-*.log"))
    began = time.monotonic()
    run = Run(bench.path, logs, where)
    try:
        until(lambda: set(logs.glob("p1-*.log")) - before, 15)
        (log,) = set(logs.glob("p1-*.log")) - before
        until(lambda: any(line[:1].isdigit() for line in log.read_text().splitlines()), 15)
        reading_s = time.monotonic() - began
        recorded = _dose(run)
        time.sleep(alive_s)
    finally:
        killed = datetime.now(UTC)
        run.process.send_signal(signal.SIGKILL)
        run.process.wait()
    return _look(log, killed, reading_s, dosed, recorded)


def _dose(run: Run) -> dict[str, object]:
    end = time.monotonic() + 5
    while True:
        try:
            return run.order("dose", {"tank": "t1", "liquid": "saline", "volume_ml": DOSE_ML})
        except (ControlError, ValueError):
            assert time.monotonic() < end, run.said  # the socket opens just after the first row
            time.sleep(0.02)


def _look(
    log: Path, killed: datetime, reading_s: float, dosed: int, recorded: dict[str, object]
) -> Round:
    header = read_header(log)
    assert header is not None
    parser = Parser()
    parser.feed(log.read_bytes())
    parser.finish()
    assert set(parser.dropped) <= {"torn"}, parser.dropped
    doses = events(log, "dose")
    assert doses[-1]["id"] == recorded["id"], "an acknowledged dose is not in the log"
    (carried,) = events(log, "carried")
    tank_ml = carried.get("ledger", {}).get("tank_ml", 1200.0)
    again = len(doses) - 1  # of the last run's end, met by this one
    assert abs(tank_ml + DOSE_ML * again - (1200.0 + DOSE_ML * dosed)) < 1e-6, (tank_ml, dosed)
    t = times(log)
    lost_s = (killed - header.started).total_seconds() - t[-1]
    hole_s = max((b - a for a, b in itertools.pairwise(t)), default=0.0)
    done = Round(reading_s, lost_s, hole_s, parser.dropped["torn"])
    assert lost_s <= LOST_S, done
    assert hole_s <= 0.5, done
    assert reading_s <= READING_S * _busy(), done
    return done


def _busy() -> float:
    """How many times slower a machine is that others use, too: its load a core, at least 1."""
    return max(1.0, os.getloadavg()[0] / (os.cpu_count() or 1))


def rounds(n: int, where: Path, seed: int = 1) -> list[Round]:
    """So many kills, one after the other, in one folder."""
    rng = random.Random(seed)
    with OnPtys(where, probes=2, rate_hz=RATE_HZ) as bench:
        return [kill(bench, where, rng.uniform(0.0, 1.5), done) for done in range(n)]


def main() -> None:
    """Run it and print the worst of each figure."""
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    with tempfile.TemporaryDirectory() as where:
        all_of = rounds(n, Path(where))
    worst = {
        "kills": n,
        "restart_to_reading_s": max(each.reading_s for each in all_of),
        "rows_lost_s": max(each.lost_s for each in all_of),
        "longest_hole_s": max(each.hole_s for each in all_of),
        "torn_lines": sum(each.torn for each in all_of),
    }
    print(json.dumps(worst))


if __name__ == "__main__":
    main()

"""Memory of one probe's chain through a simulated week: `python -m tests.soak.growth`.

A virtual tank's log, dosed every four hours, is fed to the chain as a service feeds it. Printed:
resident memory at the end of each day, and the growth a day after the second one, by which all
that is kept for a time is full. Fails above 0.5 MiB a day.
"""

from __future__ import annotations

import argparse
import gc
import sys
import tempfile
from pathlib import Path

import numpy as np

from monitor.bench import parse
from monitor.follow import Follower
from tests.speed.logs import night

DAY_S = 86_400
MOST_MIB = 0.5  # a day
PIECE = 65_536


def resident_mib() -> float:
    """Of this process, now."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmRSS:"):
            return int(line.split()[1]) / 1024
    raise RuntimeError("/proc/self/status: no VmRSS; expected Linux")


def follow(log: Path, bench: Path, days: int) -> list[float]:
    """Resident memory after each day."""
    (settings, probe) = (parse(bench.read_text(), bench.name), log.stem)
    follower = Follower(probe, settings)
    after: list[float] = []
    with log.open("rb") as file:
        while data := file.read(PIECE):
            follower.feed(data)
            if follower.chain.closed_t >= (len(after) + 1) * DAY_S - 5 and len(after) < days:
                gc.collect()
                after.append(resident_mib())
                print(f"day {len(after)}: {after[-1]:.1f} MiB", flush=True)
    return after


def main() -> int:
    """Draw the week, follow it, fit a line through the days after the second."""
    ask = argparse.ArgumentParser(description=__doc__)
    ask.add_argument("--days", type=int, default=7)
    ask.add_argument("--rate", type=float, default=5.0)
    given = ask.parse_args()
    if given.days < 4:
        print(f"--days: {given.days} is too few; expected 4 or more", file=sys.stderr)
        return 2
    with tempfile.TemporaryDirectory() as folder:
        log = Path(folder, "week.log")
        bench = night(log, given.rate, 24.0 * given.days, 6 * given.days)
        after = follow(log, bench, given.days)
    grown = float(np.polyfit(np.arange(2, len(after)), after[2:], 1)[0])
    print(f"{grown:+.3f} MiB a day after the second; at most {MOST_MIB} is allowed")
    return int(len(after) < given.days - 1 or grown > MOST_MIB)


if __name__ == "__main__":
    sys.exit(main())

"""Whole processes, measured: wall clock, processor time, peak memory."""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

ROOT = Path(__file__).parents[2]


@dataclass(frozen=True)
class Cost:
    """Of one process, or the median of several."""

    wall_s: float
    cpu_s: float
    peak_mib: float


# A process begins with the peak of the one that began it, so this one has to be small.
STARTER = """
import os, sys, time
null = os.open(os.devnull, os.O_RDWR)
begin = [(os.POSIX_SPAWN_DUP2, null, stream) for stream in (0, 1, 2)]
began_s = time.perf_counter()
pid = os.posix_spawn(sys.argv[1], sys.argv[1:], os.environ, file_actions=begin)
_, status, used = os.wait4(pid, 0)
print(time.perf_counter() - began_s, used.ru_utime + used.ru_stime, used.ru_maxrss / 1024)
sys.exit(os.waitstatus_to_exitcode(status))
"""


def run(args: Sequence[str]) -> Cost:
    """One run of this Python with these arguments, its output thrown away."""
    environment = {k: v for k, v in os.environ.items() if k != "PYTHONDONTWRITEBYTECODE"}
    command = [sys.executable, "-S", "-E", "-c", STARTER, sys.executable, *args]
    ran = subprocess.run(command, env=environment, cwd=ROOT, capture_output=True, text=True)
    if ran.returncode:
        raise RuntimeError(f"{shown(args)}: ended with {ran.returncode}")
    return Cost(*map(float, ran.stdout.split()))


def alternated(commands: Sequence[Sequence[str]], rounds: int) -> list[Cost]:
    """Medians over these rounds; each round runs every command, so that all meet the same load."""
    for args in commands:
        run(args)  # bytecode and files into their caches
    costs = [[run(args) for args in commands] for _ in range(rounds)]
    return [_median(its) for its in zip(*costs)]


def _median(costs: Sequence[Cost]) -> Cost:
    return Cost(
        statistics.median(cost.wall_s for cost in costs),
        statistics.median(cost.cpu_s for cost in costs),
        max(cost.peak_mib for cost in costs),
    )


def line(sizes: Sequence[float], costs_s: Sequence[float]) -> tuple[float, float, float]:
    """Fit cost = fixed + each * size by least relative squares: fixed, each, and the largest
    relative distance of a cost from the line."""
    x, y = np.asarray(sizes, float), np.asarray(costs_s, float)
    table = np.stack((1.0 / y, x / y), axis=1)
    fixed, each = np.linalg.lstsq(table, np.ones(len(y)), rcond=None)[0].tolist()
    return fixed, each, float(np.abs((fixed + each * x) / y - 1.0).max())


def stillbrine(*args: str | Path) -> list[str]:
    """The command line as arguments of Python."""
    return ["-c", "from monitor.cli import main; main()", *map(str, args)]


def shown(args: Sequence[str]) -> str:
    """As one would type it."""
    if args[0] == "-c" and "monitor.cli" in args[1]:
        return " ".join(["stillbrine", *args[2:]])
    return " ".join(["python", *args])

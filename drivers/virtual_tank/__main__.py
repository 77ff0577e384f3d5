"""Serve virtual probes for a bench file: `python -m drivers.virtual_tank --bench bench.toml`.

Each probe of the bench file gets a port that reads as its standards say. The paths are printed as
they belong into the bench file; then it runs until it is interrupted. While it runs it takes lines
on standard input: `dose TANK LIQUID ML [OPEN_S]`, `fault PROBE NAME [SECONDS]`, `mend PROBE`,
`unplug PROBE`, `plug PROBE`.
"""

from __future__ import annotations

import argparse
import asyncio
import contextlib
import math
import re
import signal
import sys
import time
import tomllib
from pathlib import Path
from typing import Any

import numpy as np

from drivers.virtual_tank import noise
from drivers.virtual_tank.bench import VirtualBench
from drivers.virtual_tank.bench_text import circuit_from
from drivers.virtual_tank.line_out import shelf
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank


class FastClock:
    """The host's monotonic clock, `speed` times as fast."""

    def __init__(self, speed: float) -> None:
        self.speed = speed
        self._zero = time.monotonic()

    def now_s(self) -> float:
        return (time.monotonic() - self._zero) * self.speed


def build(tables: dict[str, Any], clock: FastClock, folder: Path | None) -> VirtualBench:
    """A virtual bench with the names of a bench file, and probes that fit its standards."""
    rng = np.random.default_rng()
    liquids = {name: float(t["salinity_pct"]) for name, t in tables.get("liquid", {}).items()}
    bench = VirtualBench(clock, liquids, int(rng.integers(2**31)))
    for name, table in tables.get("tank", {}).items():
        mixing = Mixing(tau_s=float(rng.uniform(6.0, 20.0)))
        volume, mode = float(table.get("volume_ml", 1200.0)), table.get("mode", "grows")
        bench.tanks[name] = Tank(float(rng.uniform(0.06, 0.1)), volume, mixing, rng, mode)
    for name, table in tables["probe"].items():
        climate = Climate(24.5, wander_c=0.05, wave=noise.pink(rng))
        read = [
            (float(s["salinity_pct"]), float(s["period_us"]), float(s.get("temp_c", 25.0)))
            for s in table.get("standard", ())
            if s["salinity_pct"] > 0
        ]
        circuit = circuit_from(read) if read else Circuit()
        tick_us, rate_hz = float(table.get("tick_us", 1.0)), float(table.get("rate_hz", 5.0))
        tank = bench.tanks[table["tank"]]
        probe = Probe(tank, climate, rng, circuit, tick_us=tick_us or 0.0625, rate_hz=rate_hz)
        path = bench.hang(name, probe, folder)
        print(f'[probe.{name}] port = "{path}"', flush=True)
    return bench


def obey(bench: VirtualBench, order: str) -> str:
    """Carry out one typed order; gives what to answer."""
    try:
        match order.split():
            case ["dose", tank, liquid, volume, *rest]:
                seconds = _number(rest[0]) if rest else 0.0
                bench.dose(tank, liquid, _number(volume), seconds)
            case ["fault", probe, name, *rest]:
                bench.fault(probe, name, **({"lasts_s": _number(rest[0])} if rest else {}))
            case ["mend", probe]:
                bench.mend(probe)
            case ["unplug", probe]:
                bench.unplug(probe)
            case ["plug", probe]:
                bench.plug(probe)
            case []:
                return ""
            case _:
                return "not understood: dose, fault, mend, unplug, plug"
    except KeyError as wrong:
        return f"no such name: {wrong.args[0]!r}"
    except ValueError as wrong:
        return str(wrong)
    return f"done at {bench.time_s:.1f} s"


def _number(text: str) -> float:
    value = float(text)
    if not (math.isfinite(value) and value >= 0):
        raise ValueError(f"{text!r} is no amount; expected a number, 0 or more")
    return value


async def serve(bench: VirtualBench) -> None:
    """Run the bench and take orders from standard input."""
    loop = asyncio.get_running_loop()

    def typed() -> None:
        order = sys.stdin.readline()
        if not order:
            loop.remove_reader(sys.stdin)
        elif answer := obey(bench, order):
            print(answer, flush=True)

    with contextlib.suppress(PermissionError):  # a file or /dev/null cannot be waited for
        loop.add_reader(sys.stdin, typed)
    await bench.run()


def main() -> int:
    ask = argparse.ArgumentParser(description="Serve virtual probes for a bench file.")
    ask.add_argument("--bench", type=Path, required=True)
    ask.add_argument("--speed", type=float, default=1.0)
    given = ask.parse_args()
    if not 0 < given.speed <= 1000:
        print(f"--speed: {given.speed} is not accepted; expected 0 to 1000", file=sys.stderr)
        return 2
    folder = shelf("virtual-" + re.sub(r"[^A-Za-z0-9_-]", "_", given.bench.stem)[:40])
    try:
        return _serve_file(given.bench, given.speed, folder)
    finally:
        if folder is not None:
            with contextlib.suppress(OSError):  # another one still uses it
                folder.rmdir()


def _serve_file(file: Path, speed: float, folder: Path | None) -> int:
    try:
        bench = build(tomllib.loads(file.read_text()), FastClock(speed), folder)
    except (OSError, ValueError, KeyError, TypeError, AttributeError) as wrong:
        why = f"{type(wrong).__name__}: {wrong}".replace("\n", " ")
        print(f"{file}: no bench file that checks ({why!a})", file=sys.stderr)
        return 2
    signal.signal(signal.SIGTERM, signal.default_int_handler)  # take the ports away then, too
    with contextlib.suppress(KeyboardInterrupt):
        asyncio.run(serve(bench))
    return 0


if __name__ == "__main__":
    sys.exit(main())

"""Logs to measure with, drawn from the virtual tank: doses and noise, nothing wrong.

python -m tests.speed.logs OUT.log --rate 10 --hours 12 --doses 6
"""

from __future__ import annotations

import argparse
import json
from pathlib import Path

import numpy as np

from drivers.virtual_tank import bench_text
from drivers.virtual_tank.bench_text import LIQUIDS
from tests.scenes.scene import STARTED, Scene

PIECE = 200_000  # rows drawn at a time
BAND_PCT = 0.001


def night(log: Path, rate_hz: float, hours: float, doses: int, seed: int = 8) -> Path:
    """Write such a log, its run named after the file; gives the bench file beside it.

    The first dose comes after half an hour, the others spread evenly over the rest.
    """
    rng = np.random.default_rng(seed)
    scene = Scene(log.stem, "night", rng, "stirred", rate_hz, volume_ml=2500.0)
    scene.probe.tick_us, scene.probe.thermometer_c, scene.probe.white = 0.5, 0.03, 0.002
    last_s = hours * 3600.0
    for i in range(doses):
        scene.dose(1800.0 + i * (last_s - 1800.0) / doses)
    events = [
        (met_s, f"#! {time_s:.3f} {kind} {json.dumps(fields)}\n".encode())
        for met_s, time_s, kind, fields in scene.events
    ]
    events.append((last_s, f"#! {last_s:.3f} end {{}}\n".encode()))
    probe = scene.name.replace(".", "-")
    with log.open("wb") as file:
        file.write(f"# stillbrine log 1\n# probe: {probe}\n# started: {STARTED}\n".encode())
        file.write(b"time_s,period_us,temp_c\n")
        total = round(last_s * rate_hz)
        for first in range(0, total, PIECE):
            file.write(_piece(scene, first, min(first + PIECE, total), events))
        file.writelines(text for _, text in events)
    bench = log.with_suffix(".bench.toml")
    bench.write_text(
        bench_text.probe_text(probe, "t1", scene.probe, rng)
        + bench_text.tank_text("t1", scene.recorded_ml, scene.mode, BAND_PCT)
        + bench_text.liquids_text(LIQUIDS)
    )
    return bench


def _piece(scene: Scene, first: int, stop: int, events: list[tuple[float, bytes]]) -> bytes:
    rows = scene.probe.read(first, stop)
    order = np.argsort(rows.time_s, kind="stable")
    lines: list[bytes] = []
    for t, period, temp in zip(*(column[order].tolist() for column in rows)):
        while events and events[0][0] < t:
            lines.append(events.pop(0)[1])
        lines.append(b"%.3f,%.1f,%.2f\n" % (t, period, temp))
    return b"".join(lines)


def main() -> None:
    """Write one log."""
    ask = argparse.ArgumentParser(description="Write a log to measure with.")
    ask.add_argument("log", type=Path)
    ask.add_argument("--rate", type=float, default=10.0)
    ask.add_argument("--hours", type=float, default=12.0)
    ask.add_argument("--doses", type=int, default=6)
    given = ask.parse_args()
    print(night(given.log, given.rate, given.hours, given.doses))


if __name__ == "__main__":
    main()

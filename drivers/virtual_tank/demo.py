"""The demo's bench: three invented tanks, and what happens to them in a quarter of an hour."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from drivers.virtual_tank import bench_text, noise
from drivers.virtual_tank.bench import Act, Clock, VirtualBench
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank

BAND_PCT = 0.001
TANKS = {  # label, salinity, volume, mixing
    "t1": ("north tank (invented)", 0.0852, 1200.0, Mixing("stirred", 9.0, 2.0, 0.1)),
    "t2": ("south tank (invented)", 0.0708, 2500.0, Mixing("loop", 12.0, 4.0, 0.08, beat=2.5)),
    "t3": ("seedling tank (invented)", 0.0600, 1200.0, Mixing("dead-zone", 8.0, 3.0, 0.1)),
}
AIMS_PCT = {"t1": (0.075, 0.095), "t2": (0.062, 0.078), "t3": (0.055, 0.070)}
OTHER = {"saline": "deionised", "deionised": "saline"}
PROBES = {  # tank, circuit, white noise, tick
    "p1": ("t1", Circuit(14.0, 880.0, 0.985), 0.0011, 0.5),
    "p2": ("t2", Circuit(9.0, 620.0, 0.975), 0.0020, 1.0),
    "p3": ("t3", Circuit(18.0, 1010.0, 0.990), 0.0015, 0.0625),
}
ACTS = (
    Act(35.0, "dose", "t1", {"liquid": "saline", "volume_ml": 118.0, "open_s": 14.0}),
    Act(75.0, "dose", "t2", {"liquid": "deionised", "volume_ml": 210.0, "open_s": 22.0}),
    Act(150.0, "fault", "p3", {"fault": "bubbles", "lasts_s": 120.0, "rate_hz": 0.35}),
    Act(330.0, "dose", "t3", {"liquid": "saline", "volume_ml": 95.0, "open_s": 12.0}),
    Act(480.0, "unplug", "p2"),
    Act(500.0, "plug", "p2"),
    Act(560.0, "dose", "t1", {"liquid": "deionised", "volume_ml": 90.0, "open_s": 11.0}),
    Act(700.0, "fault", "p1", {"fault": "lodged-bubble", "lasts_s": 150.0, "height": 0.22}),
)
LAP_S = 900.0


def acts(lap: int = 0) -> list[Act]:
    """What happens in the demo's next quarter of an hour.

    Every other lap takes back what the one before has dosed, so that no tank drifts away.
    """
    return [replace(act, at_s=act.at_s + lap * LAP_S, figures=_figures(act, lap)) for act in ACTS]


def _figures(act: Act, lap: int) -> dict[str, Any]:
    liquid = act.figures.get("liquid")
    if liquid is None or lap % 2 == 0:
        return dict(act.figures)
    return {**act.figures, "liquid": OTHER[liquid]}


def build(clock: Clock, folder: Path | None, seed: int = 1) -> tuple[VirtualBench, str]:
    """The demo's bench, and the text of the bench file that belongs to it.

    folder : where the ports' links go; None: ports have the system's own names
    """
    rng = np.random.default_rng(seed)
    bench = VirtualBench(clock, {name: pct for name, (pct, _) in bench_text.LIQUIDS.items()}, seed)
    text = "# bench of the demo: tanks, probes and standards are invented\n"
    for name, (tank, circuit, white, tick_us) in PROBES.items():
        label, salinity, volume, mixing = TANKS[tank]
        bench.tanks[tank] = Tank(salinity, volume, mixing, rng)
        climate = Climate(24.6, swing_c=0.12, wander_c=0.03, wave=noise.pink(rng))
        probe = Probe(bench.tanks[tank], climate, rng, circuit, white, 0.0002, tick_us, 5.0)
        text += bench_text.probe_text(name, tank, probe, rng, bench.hang(name, probe, folder))
        text += bench_text.tank_text(tank, volume, "grows", BAND_PCT, label)
        text += "aim_pct = [{}, {}]\n".format(*AIMS_PCT[tank])
    return bench, text + bench_text.liquids_text(bench_text.LIQUIDS)

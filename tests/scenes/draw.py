"""Draw scenes: a log, its bench file and the truth beside it, from the virtual tank.

    python -m tests.scenes.draw OUT --seed 1 --doses 200 --faults 4 --hours 50

`--doses` right doses, half of kinds a bench mostly shows (dose-KIND-NN), half of foreign kinds
(foreign-KIND-NN); `--faults` runs of each fault, plain and with a dose that still mixes
(mixing-FAULT-NN); `--hours` with nothing wrong (calm, thermostat), `--nights` of 12 h; `--other`
of each special dose (wrong, double, late, midnight, wiped, damaged, unrecorded); `--trends` of
evaporation, leak-in and fouling-dosed. The truth is computed from the salinity at the probe before
any noise:

- doses[].rest_t: the earliest time after which it stays within band_pct of final_pct; null where
  the next dose came first. final_pct, step_pct: by what truly went in. ledger_wrong: what was
  recorded is not that. learned_t: when it was recorded, if later. scored false: a fault makes the
  landing unknowable.
- faults[], out, excused, trend_pct_per_h as in the scorer.
"""

from __future__ import annotations

import argparse
import math
from pathlib import Path
from typing import Any

import numpy as np

from drivers.virtual_tank import FOREIGN, USUAL
from tests.scenes.scene import Scene

FAULTS = {  # length of a plain run, s
    "bubbles": 900.0,
    "lodged-bubble": 1200.0,
    "fouling": 21600.0,
    "no-pulses": 600.0,
    "short": 600.0,
    "stuck": 900.0,
    "loose-lead": 900.0,
    "hum": 900.0,
}
DURING = ("bubbles", "lodged-bubble", "no-pulses", "short", "stuck", "loose-lead", "hum")


def after_rest(scene: Scene) -> float:
    """An end that leaves time to be late in."""
    return scene.last_rest_s() + scene.rng.uniform(130.0, 300.0)


def plain_dose(scene: Scene, folder: Path, *, wrong: bool = False) -> None:
    scene.dose(scene.rng.uniform(60.0, 130.0), wrong=wrong)
    scene.write(folder, after_rest(scene))


def double_dose(scene: Scene, folder: Path) -> None:
    closed = scene.dose(80.0)
    scene.dose(closed + scene.rng.uniform(3.0, 60.0))
    scene.write(folder, after_rest(scene))


def late_dose(scene: Scene, folder: Path) -> None:
    at = scene.rng.uniform(150.0, 200.0)
    scene.dose(at, learned_s=at + scene.rng.uniform(60.0, 300.0))
    scene.write(folder, max(after_rest(scene), scene.events[0][0] + 180.0))


def midnight_dose(scene: Scene, folder: Path) -> None:
    scene.dose(240.0)
    scene.write(folder, after_rest(scene), midnight=True)


def damaged_dose(scene: Scene, folder: Path) -> None:
    scene.dose(100.0)
    scene.write(folder, after_rest(scene), damaged=True)


def wiped_dose(scene: Scene, folder: Path) -> None:
    to = scene.rng.uniform(660.0, 780.0)
    marked = bool(scene.rng.random() < 0.5)
    scene.fault("lift", 600.0, to)
    scene.more["out"] = [[600.0, round(to, 1), marked]]
    if marked:
        scene.events += [(599.9, 599.9, "out", {"why": "wipe"})]
        scene.events += [(to + 2.0, to + 2.0, "back", {})]
    scene.dose(1500.0)
    scene.write(folder, after_rest(scene))


def unrecorded_dose(scene: Scene, folder: Path) -> None:
    scene.dose(scene.rng.uniform(200.0, 400.0), recorded=False)
    scene.write(folder, 1500.0)


def one_fault(scene: Scene, folder: Path, name: str) -> None:
    lasts = FAULTS[name]
    from_s, to_s = scene.rng.uniform(0.2, 0.46) * lasts, scene.rng.uniform(0.6, 0.95) * lasts
    if name == "fouling":
        from_s, to_s = 3600.0, lasts
    scene.fault(name, from_s, to_s)
    scene.write(folder, lasts)


def fault_while_mixing(scene: Scene, folder: Path, name: str) -> None:
    closed = scene.dose(300.0, scored=False)
    from_s = scene.rng.uniform(305.0, closed + 70.0)
    to_s = from_s + scene.rng.uniform(200.0, 400.0)
    scene.fault(name, from_s, to_s)
    scene.write(folder, max(to_s + 400.0, scene.last_rest_s() + 60.0))


def fouling_dosed(scene: Scene, folder: Path) -> None:
    scene.dose(1800.0)
    for at in (14000.0, 19000.0):
        scene.dose(at, scored=False)
    scene.fault("fouling", 5400.0, 21600.0)
    scene.write(folder, 21600.0)


def undisturbed(scene: Scene, folder: Path, lasts_s: float) -> None:
    scene.write(folder, lasts_s)


def night(scene: Scene, folder: Path) -> None:
    """Twelve hours, six doses, an hour of bubbles' worth and a silence in between."""
    for i in range(6):
        scene.dose(1800.0 + 7200.0 * i + scene.rng.uniform(0.0, 1500.0))
    scene.fault("bubbles", 22500.0, 23100.0)
    scene.fault("no-pulses", 30300.0, 30600.0)
    scene.write(folder, 43200.0)


def main(argv: list[str] | None = None) -> int:
    ask = argparse.ArgumentParser(description="Draw scenes with a known truth.")
    ask.add_argument("out", type=Path)
    ask.add_argument("--seed", type=int, default=1)
    ask.add_argument("--doses", type=int, default=0)
    ask.add_argument("--faults", type=int, default=0)
    ask.add_argument("--hours", type=float, default=0.0)
    ask.add_argument("--other", type=int, default=0)
    ask.add_argument("--trends", type=int, default=0)
    ask.add_argument("--nights", type=int, default=0)
    given = ask.parse_args(argv)
    given.out.mkdir(parents=True, exist_ok=True)
    count = 0

    def new(name: str, family: str, number: int, **how: Any) -> Scene:
        nonlocal count
        count += 1
        seeds = np.random.SeedSequence([given.seed, *name.encode(), number])
        return Scene(f"{name}-{number:03d}", family, np.random.default_rng(seeds), **how)

    for i in range(given.doses):
        kinds, called = (USUAL, "dose") if i % 2 == 0 else (FOREIGN, "foreign")
        kind = kinds[i // 2 % len(kinds)]
        plain_dose(new(f"{called}-{kind}", "dose", i + 1, kind=kind), given.out)
    special = {
        "double-dose": ("double", double_dose),
        "late-dose": ("dose", late_dose),
        "midnight-dose": ("dose", midnight_dose),
        "damaged-dose": ("dose", damaged_dose),
        "wiped-dose": ("dose", wiped_dose),
        "unrecorded-dose": ("unrecorded", unrecorded_dose),
    }
    any_kind = (*USUAL, *FOREIGN)
    for i in range(given.other):
        for name, (family, draw) in special.items():
            draw(new(name, family, i + 1, kind=any_kind[i % len(any_kind)]), given.out)
        plain_dose(new("wrong-dose", "wrong", i + 1), given.out, wrong=True)
    for i in range(given.faults):
        for name in FAULTS:
            slow = {"rate_hz": 2.0, "thermometer": True} if name == "fouling" else {}
            one_fault(new(name, "fault", i + 1, **slow), given.out, name)
        for name in DURING:
            fault_while_mixing(new(f"mixing-{name}", "fault", i + 1), given.out, name)
    for i in range(given.trends):
        slow = {"rate_hz": 2.0, "thermometer": True}
        dry = -float(np.random.default_rng([given.seed, i]).uniform(1.2, 3.5))
        undisturbed(
            new("evaporation", "trend", i + 1, water_pct_per_h=dry, **slow), given.out, 21600.0
        )
        leak = new("leak-in", "trend", i + 1, water_pct_per_h=-dry, **slow)
        leak.more["excused"] = ["fouling"]
        undisturbed(leak, given.out, 21600.0)
        fouling_dosed(new("fouling-dosed", "fault", i + 1, volume_ml=2500.0, **slow), given.out)
    for i in range(math.ceil(given.hours / 3)):
        undisturbed(new("calm", "calm", i + 1), given.out, 3600.0)
        swing = 0.2 + 0.8 * (i % 5) / 5
        thermostat = new("thermostat", "calm", i + 1, swing_c=swing, rate_hz=2.0, thermometer=True)
        undisturbed(thermostat, given.out, 7200.0)
    for i in range(given.nights):
        night(new("night", "night", i + 1, rate_hz=2.0, volume_ml=2500.0), given.out)
    print(f"{count} scenes in {given.out}")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())

"""Random calibrations against a simulated probe: how far off, and does the doubt hold?

    python -m tests.calibration_draws --draws 300 --seed 1

Each draw is a probe (polarisation exponent 0.96 to 1, its own time, cell, noise, tick, the water's
own salts), six standards at 21 to 27 C whose salinities scatter by 0.02 to 0.1 %, and ten periods
inside their span and two outside it at 19 to 30 C. The salt water is that of the handbook tables,
not that of the program. Printed: what people commonly use (straight lines above all) on the same
draws; the share of true salinities inside u95, median and 95 % error, how wide u95 is beside that
error, and whether what is outside is flagged.
"""

from __future__ import annotations

import argparse
import csv
from collections.abc import Callable
from pathlib import Path
from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicSpline

from monitor.bench import Standard
from monitor.blocks import Floats
from monitor.calibration import fit
from monitor.calibration.candidates import candidates

DATA = Path(__file__).parent / "reference" / "data"
LEVELS = (0.025, 0.05, 0.075, 0.1, 0.125, 0.15)
INSIDE = (0.03, 0.145)
SLOW = 2e-4  # of a standard's mean period: what does not average out
BEYOND = ((0.012, 0.02), (0.17, 0.22))


class Result(NamedTuple):
    """All values of a run of draws, a row each."""

    error: Floats  # relative
    u95: Floats  # relative
    common: dict[str, Floats]  # relative errors of what people commonly use, by name
    flagged: Floats  # share of the values outside that were flagged
    held: Floats  # share of the values inside that were not


def salt_water() -> Callable[[Floats, Floats], Floats]:
    """Conductivity in mS/cm from salinity in % and temperature in C, by the tables.

    Molar conductivities at 25 C: CRC Handbook (Vanysek). Temperature: the NaCl column, recomputed
    from McCleskey et al. 2012. Both files say how far they were verified.
    """
    molar = [row for row in _rows("molar_conductivity_25C.csv") if row["salt"] == "NaCl"]
    root_c = np.sqrt([float(row["c_mol_L"]) for row in molar])
    at_25 = CubicSpline(root_c, [float(row["lambda_abs_S_cm2_mol"]) for row in molar])
    warm = _rows("temperature_compensation_f25.csv")
    f25 = CubicSpline(
        [float(row["t_C"]) for row in warm], [float(row["f25_NaCl_2g_per_kg"]) for row in warm]
    )

    def conductivity_ms(salinity_pct: Floats, temp_c: Floats) -> Floats:
        c = (0.99705 + 0.0070 * salinity_pct) * salinity_pct * 10 / 58.443
        return np.asarray(at_25(np.sqrt(c)) * c / f25(temp_c))

    return conductivity_ms


class Simulated:
    """A probe drawn at random."""

    def __init__(self, rng: np.random.Generator, water: Callable[[Floats, Floats], Floats]) -> None:
        self.rng = rng
        self.water = water
        self.power = rng.uniform(0.96, 1.0)
        self.scale_us = rng.uniform(300.0, 1500.0)
        self.t0_us = rng.uniform(0.0, 0.1) * self.scale_us / 3
        self.own_ms = rng.uniform(0.0005, 0.003)
        self.noise = 10 ** rng.uniform(-3.3, -2.4)
        self.scatter = 10 ** rng.uniform(-3.7, -3.0)
        self.tick_us = float(rng.choice([0.0625, 0.5, 1.0]))

    def period_us(self, salinity_pct: Floats, temp_c: Floats) -> Floats:
        """Without noise."""
        own = self.own_ms * (1 + 0.02 * (temp_c - 25.0))
        k = self.water(salinity_pct, temp_c) + own
        return np.asarray(self.t0_us + self.scale_us * k**-self.power)

    def standard(self, salinity_pct: float, temp_c: float) -> Standard:
        """One standard as it is read: noise, slow noise, tick, mixing and thermometer."""
        rng = self.rng
        true = salinity_pct * (1 + self.scatter * rng.standard_normal())
        period = float(self.period_us(np.array([true]), np.array([temp_c]))[0])
        readings = int(rng.integers(60, 200))
        slow = 1 + SLOW * rng.standard_normal()
        raw = period * slow * (1 + self.noise * rng.standard_normal(readings))
        seen = np.round(raw / self.tick_us) * self.tick_us
        return Standard(
            salinity_pct=salinity_pct,
            period_us=round(float(seen.mean()), 4),
            sd_us=round(float(seen.std(ddof=1)), 4),
            readings=readings,
            temp_c=round(temp_c + 0.01 * rng.standard_normal(), 3),
        )


def run(draws: int, seed: int) -> Result:
    """Draw, calibrate, read back."""
    rng = np.random.default_rng(seed)
    water = salt_water()
    errors, doubts, flagged, held = [], [], [], []
    common: dict[str, list[Floats]] = {}
    for _ in range(draws):
        probe = Simulated(rng, water)
        room_c = rng.uniform(21.0, 27.0)
        standards = [probe.standard(s, room_c + rng.normal(0, 0.1)) for s in LEVELS]
        calibration = fit(standards, "NaCl", probe.tick_us)
        salinity = np.concatenate(
            [rng.uniform(*INSIDE, 10), *(rng.uniform(*span, 1) for span in BEYOND)]
        )
        temp = rng.uniform(19.0, 30.0, 12)
        period = probe.period_us(salinity, temp)
        read = calibration.salinity_pct(period, temp)
        u95 = np.array([2 * calibration.u_pct(p, t) for p, t in zip(period, temp)])
        inside = [calibration.inside(s, u) for s, u in zip(read.tolist(), u95.tolist())]
        errors.append((read / salinity - 1)[:10])
        doubts.append((u95 / salinity)[:10])
        for name, candidate in candidates(standards, "NaCl").items():
            common.setdefault(name, []).append((candidate(period, temp) / salinity - 1)[:10])
        held.append(inside[:10])
        flagged.append([not flag for flag in inside[10:]])
    return Result(
        np.concatenate(errors),
        np.concatenate(doubts),
        {name: np.concatenate(of) for name, of in common.items()},
        np.array(flagged, dtype=np.float64),
        np.array(held, dtype=np.float64),
    )


def report(result: Result) -> str:
    """The figures, a line each."""
    error = np.abs(result.error)
    inside = float((error <= result.u95).mean())
    at_95 = float(np.quantile(error, 0.95))
    wide = float(np.median(result.u95))
    lines = [
        f"beside it, {name}: median {100 * np.median(off):.2f} %,"
        f" 95 % {100 * np.quantile(off, 0.95):.1f} %"
        for name, off in ((name, np.abs(error)) for name, error in result.common.items())
    ]
    return "\n".join(lines) + (
        f"\ntrue salinity inside u95: {100 * inside:.1f} % of {len(error)}\n"
        f"error: median {100 * np.median(error):.3f} %, 95 % {100 * at_95:.3f} %\n"
        f"u95: median {100 * wide:.3f} %, {wide / at_95:.2f} times the 95 % error\n"
        f"outside the span flagged: {100 * result.flagged.mean():.1f} % of {result.flagged.size};"
        f" inside not flagged: {100 * result.held.mean():.1f} % of {result.held.size}"
    )


def _rows(name: str) -> list[dict[str, str]]:
    with (DATA / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


def main() -> None:
    """Run from the command line."""
    ask = argparse.ArgumentParser(description="Random calibrations against a simulated probe.")
    ask.add_argument("--draws", type=int, default=300)
    ask.add_argument("--seed", type=int, default=1)
    given = ask.parse_args()
    print(report(run(given.draws, given.seed)))


if __name__ == "__main__":
    main()

"""Mass balance and valve flow against published examples, the GUM and elementary physics."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
import scipy.stats

from monitor.dosing.balance import Known, landing, volume_for, volume_rule_off
from monitor.dosing.valve import flow
from tests.reference.tables import checks, figures

DILUTION = figures("dilution_and_mixing.json")
MIXES = [e for e in DILUTION["mass_fraction_mixing_recomputed"]["examples"] if "V1_L" in e]


def exact(value: float) -> Known:
    return Known(value, 0.0)


@pytest.mark.parametrize("example", DILUTION["C1V1_published"], ids=lambda e: f"{e['c1']}")
def test_published_dilutions(example: dict[str, Any]) -> None:
    checks(example["source"])
    c1, v1, v2, c2 = (example[name] for name in ("c1", "V1", "V2", "c2"))
    # the rule is the same in any unit of concentration; hundredths keep it that of volumes
    landed = landing("grows", exact(0.0), exact(v2 - v1), exact(c1 / 100), exact(v1))
    digits = 0.5 * 10.0 ** -len(str(c2).split(".")[1])
    assert 100 * landed.value == pytest.approx(c2, abs=digits + 1e-9)
    needed = volume_for("grows", 0.0, landed.value, v2 - v1, c1 / 100)
    assert needed == pytest.approx(v1, rel=1e-12)


@pytest.mark.parametrize("example", MIXES, ids=lambda e: f"{e['w2']}")
def test_strong_liquids_are_mixed_by_mass(example: dict[str, float]) -> None:
    checks("w = (m1 w1 + m2 w2)/(m1 + m2), volumes by Laliberte and Cooper at 20 C; recomputed")
    before, brine = 100 * example["w1"], 100 * example["w2"]
    tank_ml, dose_ml = 1000 * example["V1_L"], 1000 * example["V2_L"]
    landed = landing("grows", exact(before), exact(tank_ml), exact(brine), exact(dose_ml)).value
    step = 100 * example["w_mix"] - before
    assert landed - before == pytest.approx(step, rel=1.5e-3)  # the densities here are for 25 C
    off = volume_rule_off("grows", before, tank_ml, brine, dose_ml)
    by_volume = before + (brine - before) * dose_ml / (tank_ml + dose_ml)
    assert off == pytest.approx(by_volume - 100 * example["w_mix"], rel=0.02)
    assert abs(off) > 0.03 * step


def test_brine_needed_by_mass() -> None:
    checks("m_b = M (w2 - w1)/(w_b - w2), recomputed; densities by Laliberte and Cooper at 20 C")
    example = DILUTION["dose_relations"]["example_brine"]
    other = next(e for e in MIXES if e["w2"] == example["w_b"] and e["w1"] == example["w1"])
    per_kg = other["V2_L"] / other["m2_kg"]
    needed = volume_for("grows", 0.1, 0.3, 1000 * other["V1_L"], 20.0)
    assert needed == pytest.approx(example["m_b_g"] * per_kg, rel=1.5e-3)


def test_weak_liquids_need_no_masses() -> None:
    checks("densities by Laliberte and Cooper: what is left out between 0 and 0.2 %")
    step = landing("grows", exact(0.08), exact(1200.0), exact(0.15), exact(52.5)).value - 0.08
    assert abs(volume_rule_off("grows", 0.08, 1200.0, 0.15, 52.5)) < 1e-3 * step


@pytest.mark.parametrize("share", [0.01, 0.3, 1.0, 2.996])
def test_an_overflowing_tank_is_a_stirred_one(share: float) -> None:
    checks("first-order wash-out, dS/dv = (Sd - S)/V, integrated in small steps (elementary)")
    n, value = 200_000, 0.08
    for _ in range(n):
        value += (0.15 - value) * share / n
    landed = landing("overflows", exact(0.08), exact(1200.0), exact(0.15), exact(1200.0 * share))
    assert landed.value == pytest.approx(value, abs=2e-6)
    if share == 2.996:
        assert (0.15 - landed.value) / 0.07 == pytest.approx(0.05, abs=1e-4)  # t95 = 2.996 tau


@pytest.mark.parametrize("mode", ["grows", "overflows"])
def test_the_doubt_of_the_landing(mode: str) -> None:
    checks("JCGM 100:2008, 5.1.2; and propagation of distributions, JCGM 101:2008, by simulation")
    given = (Known(0.08, 2e-4), Known(1200.0, 12.0), Known(0.15, 5e-4), Known(200.0, 3.0))
    told = landing(mode, *given)
    squares = 0.0
    for i, each in enumerate(given):
        ends = []
        for sign in (-1, 1):
            moved = list(given)
            moved[i] = Known(each.value + sign * 1e-3 * each.u, each.u)
            ends.append(landing(mode, *moved).value)
        squares += ((ends[1] - ends[0]) / 2e-3) ** 2
    assert told.u == pytest.approx(math.sqrt(squares), rel=1e-6)
    rng = np.random.default_rng(3)
    s0, tank, sd, v = (rng.normal(each.value, each.u, 400_000) for each in given)
    left = tank / (tank + v) if mode == "grows" else np.exp(-v / tank)
    drawn = sd + (s0 - sd) * left
    assert told.value == pytest.approx(drawn.mean(), abs=2e-6)
    assert told.u == pytest.approx(drawn.std(), rel=0.01)


@pytest.mark.parametrize("mode", ["grows", "overflows"])
@pytest.mark.parametrize("aim", [0.0801, 0.1, 0.14, 19.0])
def test_the_volume_for_an_aim_lands_on_it(mode: str, aim: float) -> None:
    liquid = 0.15 if aim < 0.15 else 20.0
    needed = volume_for(mode, 0.08, aim, 1200.0, liquid)
    landed = landing(mode, exact(0.08), exact(1200.0), exact(liquid), exact(needed))
    assert landed.value == pytest.approx(aim, rel=1e-12)


def test_a_small_valve() -> None:
    checks("common practice, no source: about 5 mL/s, 20 mL take about 4 s")
    found = flow([(1.0, 5.1), (2.0, 10.0), (5.0, 24.8)])
    assert found.ml_per_s == pytest.approx(5.0, rel=0.05)
    assert found.open_s(20.0) == pytest.approx(4.0, rel=0.05)


def test_the_straight_line_of_runs() -> None:
    checks("NIST StRD Norris, certified to 15 digits")
    norris = figures("nist_strd_Norris.json")
    found = flow(list(zip(norris["x"], norris["y"])))
    certified = norris["certified"]
    assert found.offset_ml == pytest.approx(certified["B0"], rel=1e-9)
    assert found.u_offset_ml == pytest.approx(certified["B0_sd"], rel=1e-9)
    assert found.ml_per_s == pytest.approx(certified["B1"], rel=1e-9)
    assert found.u_ml_per_s == pytest.approx(certified["B1_sd"], rel=1e-9)
    assert found.sd_ml == pytest.approx(certified["resid_sd"], rel=1e-9)


def test_lack_of_fit() -> None:
    checks("analysis of variance with repeats, F distribution of SciPy")
    runs = [(1.0, 5.0), (1.0, 5.2), (2.0, 10.0), (2.0, 10.1), (5.0, 24.0), (5.0, 24.2)]
    t, ml = np.array(runs).T
    line = np.polyval(np.polyfit(t, ml, 1), t)
    means = np.repeat(ml.reshape(3, 2).mean(axis=1), 2)
    f = ((means - line) ** 2).sum() / 1 / (((ml - means) ** 2).sum() / 3)
    found = flow(runs)
    assert found.lack_of_fit_p == pytest.approx(scipy.stats.f.sf(f, 1, 3), rel=1e-9)
    assert found.k == pytest.approx(scipy.stats.t.ppf(0.975, 4), rel=1e-9)

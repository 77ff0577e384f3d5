"""Lines, inverse prediction, scores and mixing against published worked examples.

Each data file names its source in full and how far it was verified.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from monitor.calibration.checks import e_n, zeta
from monitor.calibration.line import Line, line
from monitor.calibration.plan import Doubts, mix
from monitor.calibration.student import t_quantile
from monitor.water import medium
from monitor.water.density import nacl_g_ml
from tests.reference.tables import checks, figures


def example(name: str) -> Any:
    found = [
        e for e in figures("inverse_prediction_examples.json")["examples"] if name in e["name"]
    ]
    assert len(found) == 1
    checks(found[0]["source"])
    return found[0]


def line_of(data: Any, x: str = "x", y: str = "y") -> Line:
    return line(np.array(data[x], dtype=np.float64), np.array(data[y], dtype=np.float64))


def half_digit(published: float, found: float, digits: int) -> bool:
    return abs(published - found) <= 0.5 * 10.0**-digits * 1.001


def test_norris() -> None:
    data = figures("nist_strd_Norris.json")
    checks(data["source"])
    found, certified = line_of(data), data["certified"]
    assert found.a == pytest.approx(certified["B0"], rel=1e-10)
    assert found.b == pytest.approx(certified["B1"], rel=1e-12)
    assert found.u_a == pytest.approx(certified["B0_sd"], rel=1e-10)
    assert found.u_b == pytest.approx(certified["B1_sd"], rel=1e-10)
    assert found.s == pytest.approx(certified["resid_sd"], rel=1e-10)


def test_quam_a5_inverse_prediction() -> None:
    data = figures("quam_A5_cadmium.json")
    checks(data["source"])
    found, published = line_of(data, "conc_mg_L", "absorbance"), data["published"]
    assert half_digit(published["B1"], found.b, 3)
    assert half_digit(published["B0"], found.a, 4)
    assert half_digit(published["u_B1"], found.u_b, 3)
    assert half_digit(published["u_B0"], found.u_a, 4)
    c0, u = found.inverse(float(np.mean(data["sample_absorbances"])), data["p"])
    assert half_digit(published["c0"], c0, 2)
    assert half_digit(published["u_c0"], u, 3)
    assert (c0, u) == pytest.approx(
        (data["recomputed"]["c0"], data["recomputed"]["u_c0"]), rel=1e-6
    )
    limits = found.fieller(float(np.mean(data["sample_absorbances"])), t_quantile(0.975, 13), 2)
    assert limits == pytest.approx(data["recomputed"]["fieller95"], rel=1e-6)


def test_miller_fluorescein() -> None:
    data = example("fluorescein")
    found = line_of(data)
    assert half_digit(data["published"]["b"], found.b, 2)
    assert half_digit(data["published"]["a"], found.a, 2)
    assert found.s == pytest.approx(data["published"]["s_yx"], abs=1e-4)
    for y, x0 in data["published"]["x0"].items():
        x, u = found.inverse(float(y))
        again = data["recomputed"][f"y0={y}"]
        assert abs(x - x0) < 0.006
        assert abs(u - data["published"]["s_x0_m1"][y]) < 0.006
        assert (x, u) == pytest.approx((again["x0"], again["se"]), rel=1e-6)
        t = t_quantile(0.975, 5)
        assert t * u == pytest.approx(again["half95"], rel=1e-6)
        assert found.fieller(float(y), t, 1) == pytest.approx(
            (again["fieller_lo"], again["fieller_hi"]), rel=1e-6
        )


@pytest.mark.parametrize(
    ("y", "of", "name", "x0", "half"),
    [(15, 1, "y=15", 6.1, 4.9), (90, 1, "y=90", 43.9, 4.9), (90, 5, "y=90x5", 43.9, 3.2)],
)
def test_massart_unweighted(y: float, of: int, name: str, x0: float, half: float) -> None:
    data = example("ex. 7")
    x, u = line_of(data).inverse(y, of)
    assert abs(x - x0) < 0.05
    assert abs(t_quantile(0.975, 4) * u - half) < 0.05
    again = data["recomputed"][name]
    assert (x, u, t_quantile(0.975, 4) * u) == pytest.approx(again, rel=1e-6)


@pytest.mark.parametrize(("y", "ws", "x0", "half"), [(15, 1.67, 5.9, 2.5), (90, 0.145, 44.1, 7.9)])
def test_massart_weighted(y: float, ws: float, x0: float, half: float) -> None:
    data = example("ex. 8")
    x = np.array([float(level) for level in data["means"]])
    found = line(x, np.array(list(data["means"].values())), np.array(data["w"]))
    value, u = found.inverse(y, ws)
    assert abs(value - x0) < 0.05
    assert abs(t_quantile(0.975, 4) * u - half) < 0.05


def test_din_32645() -> None:
    data = example("DIN 32645")
    x, u = line_of(data).inverse(3500)
    half = t_quantile(0.995, 8) * u
    assert half == pytest.approx(data["published"]["half-width of x at y=3500, 99 %"], abs=5e-5)
    assert (x, u, half) == pytest.approx(data["recomputed"]["x0_se_half99_at_3500"], rel=1e-6)


def test_thermometer_by_fieller() -> None:
    data = example("Thermometer calibration")
    found = line_of(data)
    for y, level, name in ((104.0, 0.975, "y=104"), (100.0, 0.95, "y=100_90")):
        limits = found.fieller(y, t_quantile(level, 6), 1)
        assert (found.inverse(y)[0], *limits) == pytest.approx(data["recomputed"][name], rel=1e-6)
        published = data["published"][
            f"{name.partition('_')[0]}, {'95' if level > 0.96 else '90'} %"
        ]
        assert np.abs(np.array(limits) - published[1:]).max() < 0.02


def test_reaction_chamber_mean_response() -> None:
    data = example("Reaction chamber")
    found = line_of(data)
    limits = found.fieller(400.0, t_quantile(0.995, 9))
    assert (found.inverse(400.0)[0], *limits) == pytest.approx(data["recomputed"], rel=1e-6)
    assert np.abs(np.array(limits) - data["published"]["y=400 mean, 99 %"][1:]).max() < 0.0051


def test_bevington_line() -> None:
    data = example("Straight-line fit")
    found, published = line_of(data), data["published"]
    assert (found.a, found.b) == pytest.approx((published["a"], published["b"]), abs=1e-6)
    assert (found.u_a, found.u_b) == pytest.approx((published["u_a"], published["u_b"]), abs=1e-6)


def test_gum_h3_thermometer_line() -> None:
    data = example("GUM H.3")
    x = np.array(data["t_C"]) - data["t0"]
    found, published = line(x, np.array(data["correction_C"])), data["published"]
    assert half_digit(published["y1"], found.a, 4)
    assert half_digit(published["y2"], found.b, 5)
    assert half_digit(published["s_y1"], found.u_a, 4)
    assert half_digit(published["s_y2"], found.u_b, 5)
    assert half_digit(published["s"], found.s, 4)
    value, u = found.at(10.0)
    assert half_digit(published["b(30C)"], value, 4)
    assert half_digit(published["u(b30)"], u, 4)


def test_gum_h1_effective_degrees_of_freedom() -> None:
    data = figures("scores_and_gum.json")["gum_H1"]
    checks(data["source"])
    parts = data["components_nm_dof"].values()
    u = math.sqrt(math.fsum(part[0] ** 2 for part in parts))
    nu = u**4 / math.fsum(part[0] ** 4 / part[1] for part in parts)
    assert round(u) == data["published"]["u_c_nm"]
    assert nu == pytest.approx(data["published"]["nu_eff"], abs=0.1)
    assert half_digit(data["published"]["t99(16)"], t_quantile(0.995, 16), 2)
    assert t_quantile(0.995, 16) == pytest.approx(data["recomputed"]["t99_16"], rel=1e-6)


def test_t_table() -> None:
    data = figures("scores_and_gum.json")
    checks(data["t_source"])
    for nu, row in data["t_quantiles"].items():
        assert t_quantile(0.975, float(nu)) == pytest.approx(row["t95"], rel=1e-9)
        assert t_quantile(0.995, float(nu)) == pytest.approx(row["t99"], rel=1e-9)


def test_zeta_and_e_n() -> None:
    data = figures("scores_and_gum.json")
    checks(data["zeta_NIST"]["source"])
    gear = data["zeta_NIST"]
    u, u_ref = gear["u_x = sd of batch 1"], gear["u_ref = sd of all 100 diameters"]
    found = [zeta(x, u, gear["Xref"], u_ref) for x in gear["x_batch1"][:5]]
    assert found == pytest.approx(gear["printed"], abs=0.001)
    worked = data["worked_numbers_recomputed_not_published"]
    x, ref, u, u_ref = worked["x"], worked["xpt"], worked["u_x"], worked["u_xpt"]
    assert zeta(x, u, ref, u_ref) == pytest.approx(worked["zeta"], rel=1e-9)
    assert e_n(x, 2 * u, ref, 2 * u_ref) == pytest.approx(worked["En_k2"], rel=1e-9)


def test_mixing_by_mass_and_volume() -> None:
    data = figures("dilution_and_mixing.json")["mass_fraction_mixing_recomputed"]
    checks(data["formula"] + " (recomputed, not published)")
    for worked in data["examples"]:
        if worked["w1"] != 0.0:
            continue  # the plan mixes with pure water
        stock, level = 100 * worked["w2"], 100 * worked["w_mix"]
        volume_l = worked["V_mix_L"]
        made = mix(medium("NaCl"), stock, 1000 * volume_l, level, Doubts())
        assert made.stock_g == pytest.approx(1000 * worked["m2_kg"], rel=1e-6)
        assert made.water_g == pytest.approx(1000 * worked["m1_kg"], rel=1e-6)
        assert made.stock_ml == pytest.approx(1000 * worked["V2_L"], rel=1e-5)
        assert made.water_ml == pytest.approx(1000 * worked["V1_L"], rel=1e-5)


def test_dilution_by_volume() -> None:
    checks("c1 V1 = c2 V2 of the textbooks in dilution_and_mixing.json, where salt is dilute")
    for stock, level in ((1.0, 0.1), (0.5, 0.05)):
        made = mix(medium("NaCl"), stock, 1000.0, level, Doubts())
        rho = [float(nacl_g_ml(np.array([s]), np.array([20.0]))[0]) for s in (stock, level)]
        assert made.stock_ml * stock * rho[0] == pytest.approx(1000.0 * level * rho[1], rel=1e-9)

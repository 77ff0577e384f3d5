"""The standards plan: doubts by simulation, levels by what they promise."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.calibration.plan import Doubts, best_levels, even_levels, expected_u, mix
from monitor.water import medium

NACL = medium("NaCl")


@pytest.mark.parametrize("by", ["mass", "volume"])
def test_doubt_of_a_standard_is_that_of_its_making(by: str) -> None:
    doubts = Doubts(stock_pct=0.003, balance_g=0.05, cylinder_ml=0.5)
    made = mix(NACL, 1.0, 200.0, 0.1, doubts)
    rng = np.random.default_rng(1)
    n = 200_000
    stock, water = (
        np.array([made.stock_g, made.water_g])
        if by == "mass"
        else np.array([made.stock_ml, made.water_ml])
    )
    u = doubts.balance_g if by == "mass" else doubts.cylinder_ml
    stock_rho = made.stock_g / made.stock_ml if by == "volume" else 1.0
    water_rho = made.water_g / made.water_ml if by == "volume" else 1.0
    stock_g = (stock + u * rng.standard_normal(n)) * stock_rho
    water_g = (water + u * rng.standard_normal(n)) * water_rho
    salinity = (1.0 + 0.003 * rng.standard_normal(n)) * stock_g / (stock_g + water_g)
    assert salinity.mean() == pytest.approx(0.1, rel=2e-4)
    found = made.u_by_mass_pct if by == "mass" else made.u_by_volume_pct
    assert found == pytest.approx(salinity.std(), rel=0.01)


def test_pure_water_and_pure_stock() -> None:
    water = mix(NACL, 1.0, 100.0, 0.0, Doubts(stock_pct=0.01))
    assert water.stock_g == 0
    assert water.u_by_mass_pct == 0
    stock = mix(NACL, 1.0, 100.0, 1.0, Doubts(stock_pct=0.01))
    assert stock.water_ml == 0
    assert stock.stock_ml == pytest.approx(100.0)
    assert stock.u_by_mass_pct == pytest.approx(0.01)


def test_more_levels_help_and_the_best_ones_help_most_at_the_aim() -> None:
    even = even_levels(0.025, 0.15, 6)
    assert even == [0.025, 0.05, 0.075, 0.1, 0.125, 0.15]
    at = [0.06, 0.1]
    u6, u12 = expected_u(NACL, even, at), expected_u(NACL, even_levels(0.025, 0.15, 12), at)
    assert (u12 < u6).all()
    assert 1e-4 < u6[1] < 1e-3
    best = best_levels(NACL, 0.025, 0.15, 6, 0.1)
    assert expected_u(NACL, best, [0.1])[0] < u6[1]
    assert expected_u(NACL, best, [0.03])[0] > expected_u(NACL, even, [0.03])[0]


def test_one_level_is_allowed() -> None:
    assert even_levels(0.025, 0.15, 1) == [0.15]
    assert np.isfinite(expected_u(NACL, [0.1], [0.1])).all()

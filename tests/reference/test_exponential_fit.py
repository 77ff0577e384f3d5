"""Exponential approach to a plateau: certified fits, and when a first-order tank is mixed."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.settling.fit import LeastSquares
from tests.reference.tables import checks, figures, rows
from tests.unit.settling_tank import BAND_PCT, dose, exponential, judge, rests, run, seconds

WIDE = 1e9  # variance of b1 before any reading: no prior to speak of


def profile(rates: np.ndarray, x: np.ndarray, y: np.ndarray) -> LeastSquares:
    """y = b1 (1 - exp(-rate x)) for many rates at once, through the recursion of the fit."""
    squares = LeastSquares(np.full((1, 1, rates.size), WIDE))
    ones = np.ones(rates.size)
    for at, value in zip(x, y):
        terms = -np.expm1(-rates * at)[None]
        squares.learn(squares.foresee(terms, value * ones, ones))
    return squares


@pytest.mark.parametrize("name", ["Misra1a", "BoxBOD"])
def test_certified_exponential_approach(name: str) -> None:
    told = figures(f"nist_strd_{name}.json")
    checks(told["source"])
    x, y = np.array(told["x"]), np.array(told["y"])
    low, high = min(told["start1"][1], told["start2"][1]) / 20, told["start1"][1] * 20
    for _ in range(4):  # narrow the rates about the least sum of squares
        rates = np.geomspace(low, high, 201)
        squares = profile(rates, x, y)
        best = int(np.clip(squares.rss.argmin(), 1, 199))
        low, high = rates[best - 1], rates[best + 1]
        if high / low < 1.0 + 1e-3:
            break
    rates = np.geomspace(low, high, 201)
    squares = profile(rates, x, y)
    curve = np.polynomial.Polynomial.fit(rates, squares.rss, 2)
    rate = float(curve.deriv().roots()[0])
    fitted = profile(np.array([rate]), x, y)
    assert float(fitted.c[0, 0]) == pytest.approx(told["certified_b"][0], rel=1e-5)
    assert rate == pytest.approx(told["certified_b"][1], rel=1e-5)
    residual = y - float(fitted.c[0, 0]) * -np.expm1(-rate * x)
    assert float(residual @ residual) == pytest.approx(told["certified_rss"], rel=1e-8)
    prior = told["certified_b"][0] ** 2 / WIDE  # what the prior adds to the sum of squares
    assert float(fitted.rss[0]) - prior == pytest.approx(told["certified_rss"], rel=1e-5)


TIMES = {row["percent_reached"]: float(row["t_over_tau"]) for row in rows("first_order_mixing.csv")}


@pytest.mark.parametrize("percent", ["95", "98", "99"])
@pytest.mark.parametrize("tau", [8.0, 20.0])
def test_first_order_mixing_time(percent: str, tau: float) -> None:
    """Rest began 3.00, 3.91 or 4.61 tau after a poured dose, for bands of 5, 2 and 1 %."""
    checks("first-order mixing: t95 = 2.996 tau, t98 = 3.912 tau, t99 = 4.605 tau")
    band = 1.0 - float(percent) / 100.0
    step = BAND_PCT / band  # % of salinity of which the band is so large a part
    volume = 1200.0 * step / (0.15 - 0.03 - step)
    poured = dose(open_s=0.0, volume_ml=volume, volume_u_ml=0.001 * volume)
    tank = exponential(tau, poured, 0.03)
    made = seconds(tank, 100 + math.ceil(12.0 * tau), noise=2e-5)
    (rest,) = rests(run(judge(), made, {100: (poured,)}))
    assert rest["verdict"] == "agrees"
    assert rest["rested_t"] == pytest.approx(100.0 + TIMES[percent] * tau, abs=0.25 * tau + 2.0)
    assert 100.0 + TIMES[percent] * tau - 2.0 <= rest["t"]

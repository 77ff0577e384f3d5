"""Standards before they are made: what to mix, how well it is known, which levels to choose."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from monitor.blocks import Floats
from monitor.calibration.model import FLOOR_SD, Rows, evaluate, first_prior
from monitor.water import Medium

PREPARED_AT_C = 20.0
BALANCE_U_G = 0.005  # standard uncertainty of one weighing: 0.01 g resolution, tared
CYLINDER_U_ML = 0.3  # standard uncertainty of one filling of a measuring cylinder
GRID = 14  # levels tried between the ends
TYPICAL_TAU = 6e-4  # scatter of carefully made standards
TYPICAL_READING = 1.5e-4  # relative noise of a standard's mean period


class Mix(NamedTuple):
    """One standard: what goes into it, and how well its salinity will be known."""

    salinity_pct: float
    stock_ml: float
    water_ml: float
    stock_g: float
    water_g: float
    u_by_mass_pct: float  # standard uncertainties, that of the stock included
    u_by_volume_pct: float
    u_stock_pct: float  # the stock's share, which all standards have in common


class Doubts(NamedTuple):
    """Standard uncertainties of the tools."""

    stock_pct: float = 0.0
    balance_g: float = BALANCE_U_G
    cylinder_ml: float = CYLINDER_U_ML


def mix(medium: Medium, stock_pct: float, each_ml: float, level_pct: float, doubts: Doubts) -> Mix:
    """How to make `each_ml` at 20 C of `level_pct` from a stock and pure water."""
    stock_rho, level_rho, water_rho = (
        float(medium.density_g_ml(np.array([s]), np.array([PREPARED_AT_C]))[0])
        for s in (stock_pct, level_pct, 0.0)
    )
    total_g = each_ml * level_rho
    stock_g = total_g * level_pct / stock_pct
    water_g = total_g - stock_g
    of_stock_g = stock_pct * water_g / total_g**2
    of_water_g = stock_pct * stock_g / total_g**2
    common = doubts.stock_pct * level_pct / stock_pct

    def u(stock_u_g: float, water_u_g: float) -> float:
        used = (stock_u_g if stock_g else 0.0), (water_u_g if water_g else 0.0)
        return math.hypot(of_stock_g * used[0], of_water_g * used[1], common)

    return Mix(
        salinity_pct=level_pct,
        stock_ml=stock_g / stock_rho,
        water_ml=water_g / water_rho,
        stock_g=stock_g,
        water_g=water_g,
        u_by_mass_pct=u(doubts.balance_g, doubts.balance_g),
        u_by_volume_pct=u(doubts.cylinder_ml * stock_rho, doubts.cylinder_ml * water_rho),
        u_stock_pct=common,
    )


def even_levels(lowest_pct: float, highest_pct: float, count: int) -> list[float]:
    """Levels at equal distances, ends included."""
    if count == 1:
        return [highest_pct]
    step = (highest_pct - lowest_pct) / (count - 1)
    return [round(lowest_pct + i * step, 6) for i in range(count)]


def expected_u(medium: Medium, levels_pct: Sequence[float], at_pct: Sequence[float]) -> Floats:
    """Relative standard uncertainty that a typical probe will have at `at_pct`, (m,).

    By the linearised model with its priors, for carefully made standards read long enough.
    """
    levels = np.array(levels_pct, dtype=np.float64)
    k25 = medium.conductivity_25_ms(levels)
    k0 = math.exp(float(np.log(np.maximum(k25, 0.001)).mean()))
    prior = first_prior(250.0)
    theta = prior.mean.copy()
    theta[1] = math.log(250.0 * 0.95) + 0.98 * math.log(float(k25.max()) / k0)
    _, slopes, power = evaluate(theta[None], _rows(levels, k25), k0)
    gain = slopes[0, :, 1] * power[0]
    var = TYPICAL_READING**2 + FLOOR_SD**2 + (gain * TYPICAL_TAU) ** 2
    a = (slopes[0] / var[:, None]).T @ slopes[0] + prior.weight
    at = np.array(at_pct, dtype=np.float64)
    _, there, power = evaluate(theta[None], _rows(at, medium.conductivity_25_ms(at)), k0)
    gain = there[0, :, 1] * power[0]
    of_ln_p = np.einsum("ni,ij,nj->n", there[0], np.linalg.inv(a), there[0])
    return np.asarray(np.sqrt(of_ln_p) / gain)


def best_levels(
    medium: Medium, lowest_pct: float, highest_pct: float, count: int, aim_pct: float
) -> list[float]:
    """Levels that make the doubt at the aim smallest, by exchange from even ones."""
    grid = even_levels(lowest_pct, highest_pct, GRID)
    levels = even_levels(lowest_pct, highest_pct, count)
    best = float(expected_u(medium, levels, [aim_pct])[0])
    improved = True
    while improved:
        improved = False
        for i in range(count):
            for level in grid:
                tried = [*levels[:i], level, *levels[i + 1 :]]
                u = float(expected_u(medium, tried, [aim_pct])[0])
                if u < best * (1 - 1e-6):
                    best, levels, improved = u, tried, True
    return sorted(levels)


def _rows(salinity_pct: Floats, k25_ms: Floats) -> Rows:
    one, zero = np.ones_like(salinity_pct), np.zeros_like(salinity_pct)
    return Rows(salinity_pct, one, k25_ms, one, one, zero, zero, zero)

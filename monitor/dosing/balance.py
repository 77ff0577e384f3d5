"""Mass balance of a dose: where the tank lands, and the standard uncertainty of that.

Salinities are % by mass, volumes mL. Volumes stand for masses as long as the densities are
nearly equal: then S = (S0 V + Sd v)/(V + v), or S = Sd + (S0 - Sd) exp(-v/V) where the tank
overflows while it mixes. A liquid that is stronger or weaker by STRONG_PCT and more is weighed:
its volume counts times its density over that of the tank's water, which makes both rules those
of masses.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from monitor.water.density import nacl_g_ml

STRONG_PCT = 0.5  # below it the volume rule errs by less than 0.4 % of the step
AT_C = 25.0  # of the densities; the ratio of two of them hardly moves with temperature


class Known(NamedTuple):
    """A figure and its standard uncertainty, in the same unit."""

    value: float
    u: float


NOT_KNOWN = Known(math.nan, math.nan)


def weight(liquid_pct: float, tank_pct: float) -> float:
    """What a mL of the liquid counts against a mL of the tank's water: 1, or the densities' ratio.

    By the densities of NaCl solutions (Laliberte and Cooper 2004); sea salt differs from them by
    5 % of the correction.
    """
    if not abs(liquid_pct - tank_pct) >= STRONG_PCT:
        return 1.0
    return density_ratio(liquid_pct, tank_pct)


def density_ratio(liquid_pct: float, tank_pct: float) -> float:
    """Density of the liquid over that of the tank's water."""
    liquid, tank = nacl_g_ml(np.array([liquid_pct, tank_pct]), np.full(2, AT_C)).tolist()
    return float(liquid / tank)


def landing(mode: str, before: Known, tank_ml: Known, liquid: Known, dose_ml: Known) -> Known:
    """Salinity after a dose has mixed in, %; NaN where a figure is missing or the tank empty.

    The uncertainty is propagated to first order (JCGM 100:2008, 5.1.2), inputs independent.
    """
    s0, big, sd = before.value, tank_ml.value, liquid.value
    if not big > 0.0:
        return NOT_KNOWN
    heavy = weight(sd, s0)
    v, v_u = heavy * dose_ml.value, heavy * dose_ml.u
    if mode == "grows":
        whole = big + v
        value = (s0 * big + sd * v) / whole
        by_before, by_liquid = big / whole, v / whole
        by_tank, by_dose = v * (s0 - sd) / whole**2, big * (sd - s0) / whole**2
    else:
        left = math.exp(-v / big)
        value = sd + (s0 - sd) * left
        by_before, by_liquid = left, 1.0 - left
        by_tank, by_dose = (s0 - sd) * left * v / big**2, -(s0 - sd) * left / big
    parts = (by_before * before.u, by_liquid * liquid.u, by_tank * tank_ml.u, by_dose * v_u)
    return Known(value, math.hypot(*parts))


def volume_rule_off(
    mode: str, before_pct: float, tank_ml: float, liquid_pct: float, dose_ml: float
) -> float:
    """By how much the landing would be off if volumes stood for masses, in %."""
    heavy = density_ratio(liquid_pct, before_pct)
    by_volume, by_mass = (
        _lands(mode, before_pct, tank_ml, liquid_pct, v) for v in (dose_ml, heavy * dose_ml)
    )
    return by_volume - by_mass


def _lands(mode: str, before_pct: float, tank_ml: float, liquid_pct: float, v: float) -> float:
    share = v / (tank_ml + v) if mode == "grows" else -math.expm1(-v / tank_ml)
    return before_pct + (liquid_pct - before_pct) * share


def volume_for(
    mode: str, before_pct: float, aim_pct: float, tank_ml: float, liquid_pct: float
) -> float:
    """Volume (mL) of a liquid that takes the tank from one salinity to another.

    Infinite where the liquid cannot take it there.
    """
    if aim_pct == before_pct:
        return 0.0
    low, high = sorted((before_pct, liquid_pct))
    if not low <= aim_pct <= high or aim_pct == liquid_pct:
        return math.inf
    if mode == "grows":
        v = tank_ml * (aim_pct - before_pct) / (liquid_pct - aim_pct)
    else:
        v = tank_ml * math.log((before_pct - liquid_pct) / (aim_pct - liquid_pct))
    return v / weight(liquid_pct, before_pct)

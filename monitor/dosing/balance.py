"""Mass balance of a dose: where the tank lands, and the standard uncertainty of that.

Salinities are % by mass, volumes mL. The volume rule (densities taken as equal) is used: between
0 and 0.2 % the densities differ by 0.15 %, the landing by less than 1e-3 of the step.
"""

from __future__ import annotations

import math
from typing import Literal, NamedTuple

Mode = Literal["grows", "overflows"]


class Known(NamedTuple):
    """A figure and its standard uncertainty, in the same unit."""

    value: float
    u: float


def landing(mode: str, before: Known, tank_ml: Known, liquid: Known, dose_ml: Known) -> Known:
    """Salinity after a dose has mixed in, %.

    grows: S = (S0 V + Sd v)/(V + v); overflows, well mixed: S = Sd + (S0 - Sd) exp(-v/V).
    The uncertainty is propagated to first order (JCGM 100:2008, 5.1.2), inputs independent.
    """
    s0, big, sd, v = before.value, tank_ml.value, liquid.value, dose_ml.value
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
    parts = (
        by_before * before.u,
        by_liquid * liquid.u,
        by_tank * tank_ml.u,
        by_dose * dose_ml.u,
    )
    return Known(value, math.hypot(*parts))


def volume_for(mode: str, before_pct: float, aim_pct: float, tank_ml: float, sd: float) -> float:
    """Volume (mL) of a liquid of salinity `sd` (%) that takes the tank from `before` to `aim`.

    Infinite where the liquid cannot take it there.
    """
    if aim_pct == before_pct:
        return 0.0
    if not (min(before_pct, sd) <= aim_pct <= max(before_pct, sd)) or aim_pct == sd:
        return math.inf
    if mode == "grows":
        return tank_ml * (aim_pct - before_pct) / (sd - aim_pct)
    return tank_ml * math.log((before_pct - sd) / (aim_pct - sd))

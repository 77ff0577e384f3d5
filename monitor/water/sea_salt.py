"""Sea salt: the Practical Salinity Scale of 1978 with its extension below 2, through gsw.

salinity_pct is reference salinity / 10: practical salinity x 35.16504/35 is in g/kg
(Millero, Feistel, Wright and McDougall, Deep-Sea Res. I 55, 50, 2008). gsw is loaded when needed.
"""

from __future__ import annotations

from typing import cast

import numpy as np

from monitor.blocks import Floats

ZERO_MS = 0.00178  # the scale's extension ends here, at 1e-6 of practical salinity, not at 0 mS/cm
LIMIT_MS = 62.0  # mS/cm at 25 C: practical salinity 42, the end of the scale
PRACTICAL_PER_PCT = 350 / 35.16504
# kappa(T) / kappa(25) of sea salt at 0.1 % from the same scale, in T - 25
FACTOR = (-5.172e-7, 5.48327e-5, 0.0204129, 1.0)


def conductivity_25_ms(salinity_pct: Floats) -> Floats:
    """Conductivity at 25 C in mS/cm from % by mass, 0 to 4.2."""
    import gsw

    return cast(Floats, gsw.C_from_SP(np.asarray(salinity_pct) * PRACTICAL_PER_PCT, 25.0, 0.0))


def salinity_pct(conductivity_ms: Floats) -> Floats:
    """Salinity in % by mass from the conductivity at 25 C in mS/cm, 0 to 62.

    Below ZERO_MS it is 0; NaN stays NaN.
    """
    import gsw

    conductivity = np.asarray(conductivity_ms, dtype=np.float64)
    practical = gsw.SP_from_C(np.maximum(conductivity, ZERO_MS), 25.0, 0.0)
    return cast(Floats, np.where(conductivity < ZERO_MS, 0.0, practical / PRACTICAL_PER_PCT))


def salinity_slope(conductivity_ms: float) -> float:
    """d salinity_pct / d conductivity_ms, by central difference."""
    step = max(1e-3 * conductivity_ms, 1e-5)
    low = max(conductivity_ms - step, ZERO_MS)
    ends = salinity_pct(np.array([low, low + 2 * step]))
    return float(ends[1] - ends[0]) / (2 * step)

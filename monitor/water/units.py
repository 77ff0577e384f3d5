"""Salinity in the units that labels and hand meters use, into one another.

% by mass is the program's own. g/L counts the grams in a litre of solution at its temperature.
"""

from __future__ import annotations

import numpy as np

from monitor.blocks import Floats
from monitor.water.media import Medium, OutOfRangeError

TURNS = 20


def g_per_kg_from_pct(salinity_pct: Floats) -> Floats:
    """Grams of salt in a kilogram of solution."""
    return np.asarray(salinity_pct * 10.0)


def pct_from_g_per_kg(salinity_g_per_kg: Floats) -> Floats:
    """% by mass from grams in a kilogram of solution."""
    return np.asarray(salinity_g_per_kg / 10.0)


def g_per_l_from_pct(salinity_pct: Floats, temp_c: Floats, medium: Medium) -> Floats:
    """Grams of salt in a litre of solution at its temperature."""
    return np.asarray(salinity_pct * 10.0 * medium.density_g_ml(salinity_pct, temp_c))


def pct_from_g_per_l(salinity_g_per_l: Floats, temp_c: Floats, medium: Medium) -> Floats:
    """% by mass from grams in a litre of solution at its temperature, to 1e-12 %."""
    pct = np.asarray(salinity_g_per_l / 10.0)
    for _ in range(TURNS):
        pct = np.asarray(salinity_g_per_l / 10.0 / medium.density_g_ml(pct, temp_c))
    return pct


def ms_per_cm_from_pct(salinity_pct: Floats, medium: Medium) -> Floats:
    """Conductivity at 25 C in mS/cm.

    Raises OutOfRangeError where the medium's law ends.
    """
    k = medium.conductivity_25_ms(salinity_pct)
    _within(k, medium)
    return k


def pct_from_ms_per_cm(conductivity_ms: Floats, medium: Medium) -> Floats:
    """% by mass from the conductivity at 25 C in mS/cm.

    Raises OutOfRangeError where the medium's law ends.
    """
    _within(conductivity_ms, medium)
    return medium.salinity_pct(conductivity_ms)


def _within(conductivity_ms: Floats, medium: Medium) -> None:
    if not bool(np.all((conductivity_ms >= 0) & (conductivity_ms <= medium.limit_ms))):
        raise OutOfRangeError(
            f"conductivity beyond the law of {medium.name}; expected 0 to {medium.limit_ms:g} mS/cm"
        )

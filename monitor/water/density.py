"""Densities of salt water in g/mL: NaCl to saturation, and sea salt."""

from __future__ import annotations

from typing import cast

import numpy as np

from monitor.blocks import Floats
from monitor.water.nacl import horner

# Laliberte and Cooper, J. Chem. Eng. Data 49, 1141 (2004), constants of NaCl as revised in
# Laliberte, J. Chem. Eng. Data 54, 1725 (2009): apparent density of the salt in solution
_SALT = (-0.00324112223655149, 0.0636354335906616, 1.01371399467365, 0.0145951015210159)
_SALT_TEMP_C = 3317.34854426537
# Kell, J. Chem. Eng. Data 20, 97 (1975): density of water, kg/m3
_WATER = (-2.8054253e-10, 1.0556302e-7, -4.6170461e-5, -0.0079870401, 16.945176, 999.83952)
_WATER_BELOW = 0.01687985


def water_g_ml(temp_c: Floats) -> Floats:
    """Density of pure water, g/mL, 0 to 100 C."""
    temp = np.asarray(temp_c, dtype=np.float64)
    return np.asarray(horner(_WATER, temp) / (1 + _WATER_BELOW * temp) / 1000)


def nacl_g_ml(salinity_pct: Floats, temp_c: Floats) -> Floats:
    """Density of NaCl solutions, g/mL; 0 to 26 % by mass, 0 to 100 C, within 0.0003 below 10 %."""
    w = np.asarray(salinity_pct, dtype=np.float64) / 100
    temp = np.asarray(temp_c, dtype=np.float64)
    c0, c1, c2, c3 = _SALT
    salt = (c0 * w + c1) * np.exp(1e-6 * (temp + _SALT_TEMP_C) ** 2) / (w + c2 + c3 * temp)
    return np.asarray(1 / ((1 - w) / water_g_ml(temp) + w / salt * 1000))


def sea_salt_g_ml(salinity_pct: Floats, temp_c: Floats) -> Floats:
    """Density of sea-salt water at the surface, g/mL; 0 to 4.2 % by mass, by TEOS-10 (gsw)."""
    import gsw

    absolute = np.asarray(salinity_pct, dtype=np.float64) * 10
    return cast(Floats, gsw.rho_t_exact(absolute, np.asarray(temp_c), 0.0) / 1000)

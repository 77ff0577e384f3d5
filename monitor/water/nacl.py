"""Conductivity of dilute NaCl solutions at 25 C, back to salinity, and the factor of temperature.

Range: 0 to 0.26 % by mass (0 to 5 mS/cm) and 5 to 35 C. Everything is a polynomial in Horner's
form, so that one value and a million give the same bits.
"""

from __future__ import annotations

import numpy as np

from monitor.blocks import Floats

LIMIT_MS = 5.0  # mS/cm at 25 C; above it the polynomial back is not good any more

MOLAR_MASS_G = 58.443
_DENSITY_25 = 0.99705  # g/mL, pure water at 25 C
_DENSITY_SLOPE = 0.0070  # g/mL for each % of NaCl

# Lambda(sqrt c), S cm2/mol: degree 4 through the eight absolute values, 0 to 0.1 mol/L, of
# Vanysek, CRC Handbook of Chemistry and Physics (Shedlovsky 1932 in absolute ohms)
_LAMBDA = (-73.564985, -24.123873, 99.234775, -88.932663, 126.388005)
# salinity / conductivity as a polynomial in sqrt(conductivity): within 3e-8 of the inverse
_BACK = (2.433e-8, 8.41640e-7, -1.41289e-6, -2.852065e-5, -3.08549e-5, 2.90279505e-3, 0.0463777522)
_BACK_SLOPE = tuple((1 + (6 - i) / 2) * c for i, c in enumerate(_BACK))  # d(k g(v))/dk
# kappa(T) / kappa(25), in T - 25: the inverse of f25 of NaCl at 2 g/kg, recomputed from
# McCleskey, Nordstrom, Ryan and Ball, Geochim. Cosmochim. Acta 77, 369 (2012)
FACTOR = (6.91e-5, 0.02048, 1.0)


def molarity(salinity_pct: Floats) -> Floats:
    """Amount concentration at 25 C, mol/L, of dilute NaCl; salinity in % by mass."""
    return (_DENSITY_25 + _DENSITY_SLOPE * salinity_pct) * salinity_pct * (10 / MOLAR_MASS_G)


def conductivity_25_ms(salinity_pct: Floats) -> Floats:
    """Conductivity at 25 C in mS/cm, within 0.01 % of the eight tabulated values.

    Parameters
    ----------
    salinity_pct : (n,) float64, % by mass, 0 to 0.58

    References
    ----------
    Vanysek, "Equivalent conductivity of electrolytes in aqueous solution", CRC Handbook of
    Chemistry and Physics, section 5.
    """
    c = molarity(salinity_pct)
    return horner(_LAMBDA, np.sqrt(c)) * c


def salinity_pct(conductivity_ms: Floats) -> Floats:
    """Salinity in % by mass from the conductivity at 25 C in mS/cm, 0 to 5."""
    return conductivity_ms * horner(_BACK, np.sqrt(conductivity_ms))


def salinity_slope(conductivity_ms: float) -> float:
    """d salinity_pct / d conductivity_ms."""
    v, value = conductivity_ms**0.5, 0.0
    for coefficient in _BACK_SLOPE:
        value = value * v + coefficient
    return value


def horner(coefficients: tuple[float, ...], x: Floats) -> Floats:
    """Polynomial with the highest power first."""
    value = np.full_like(x, coefficients[0])
    for coefficient in coefficients[1:]:
        value *= x
        value += coefficient
    return value

"""Conductivity of dilute NaCl in water, as the virtual water has it."""

from __future__ import annotations

import numpy as np

from drivers.virtual_tank.mixing import Floats

# Molar conductivity at 25 C as a polynomial in sqrt(c), c in mol/L: least squares through the
# values of P. Vanysek, CRC Handbook, "Equivalent conductivity of electrolytes", within 0.01.
_LAMBDA = (-73.564985, -24.123873, 99.234775, -88.932663, 126.388005)


def conductivity_ms_cm(salinity_pct: Floats, temp_c: Floats, background_ms_cm: float) -> Floats:
    """Of NaCl at `salinity_pct` (0 to 5 % by mass) and `temp_c` (10 to 35 C), (n,) mS/cm."""
    molar = (0.99705 + 0.0070 * salinity_pct) * salinity_pct / 5.8443
    at_25 = np.polyval(_LAMBDA, np.sqrt(molar)) * molar
    warm = temp_c - 25.0
    # 1/f of NaCl in the temperature compensation tables of common meters, within 0.01 %
    return np.asarray((at_25 + background_ms_cm) * (1 + 0.02048 * warm + 6.91e-5 * warm**2))

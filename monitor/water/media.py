"""A medium: the laws of one kind of salt water, by the name that the bench file gives it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from monitor.blocks import Floats
from monitor.water import density, nacl, sea_salt


class OutOfRangeError(ValueError):
    """A figure lies outside what the law was made for. `str()` is the one line to show."""


@dataclass(frozen=True)
class Medium:
    """Laws of a salt: arrays in, arrays out, except for `slope` and `sensitivity` (floats).

    conductivity_25_ms : salinity in % by mass -> mS/cm at 25 C
    salinity_pct : mS/cm at 25 C -> % by mass
    slope : d salinity_pct / d mS/cm
    density_g_ml : salinity in % by mass, temperature in C -> g/mL
    limit_ms : the largest conductivity at 25 C that is converted
    factor_terms : conductivity at T over that at 25 C, polynomial in T - 25, highest power first
    """

    name: str
    conductivity_25_ms: Callable[[Floats], Floats]
    salinity_pct: Callable[[Floats], Floats]
    slope: Callable[[float], float]
    density_g_ml: Callable[[Floats, Floats], Floats]
    limit_ms: float
    factor_terms: tuple[float, ...]

    def factor(self, temp_c: Floats) -> Floats:
        """Conductivity at `temp_c` over that at 25 C; made for 5 to 35 C."""
        return nacl.horner(self.factor_terms, temp_c - 25.0)

    def sensitivity(self, temp_c: float) -> tuple[float, float]:
        """The factor and its relative change per degree, f and f'/f, at one temperature."""
        d, value, slope = temp_c - 25.0, 0.0, 0.0
        for term in self.factor_terms:
            slope = slope * d + value
            value = value * d + term
        return value, slope / value


_MEDIA = {
    "NaCl": Medium(
        "NaCl",
        nacl.conductivity_25_ms,
        nacl.salinity_pct,
        nacl.salinity_slope,
        density.nacl_g_ml,
        nacl.LIMIT_MS,
        nacl.FACTOR,
    ),
    "sea salt": Medium(
        "sea salt",
        sea_salt.conductivity_25_ms,
        sea_salt.salinity_pct,
        sea_salt.salinity_slope,
        density.sea_salt_g_ml,
        sea_salt.LIMIT_MS,
        sea_salt.FACTOR,
    ),
}


def medium(name: str) -> Medium:
    """The laws of the medium of this name. Raises OutOfRangeError for a name that is none."""
    if name not in _MEDIA:
        raise OutOfRangeError(f"medium {name[:40]!r} is not known; expected one of NaCl, sea salt")
    return _MEDIA[name]

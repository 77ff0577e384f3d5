"""Noise measures: robust scale, bounds for strays, Allan deviation.

Each is the published definition; what is asked of the figures is decided by those who call it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from monitor.blocks import NAN, Floats

MAD_TO_SD = 1.482602218505602  # 1/Phi^-1(3/4): Hampel, J. Am. Stat. Assoc. 69, 383 (1974)
# Small-sample factors of MAD_TO_SD * MAD for n = 2 .. 9 and n/(n - 0.8) above: Croux & Rousseeuw,
# Computational Statistics 1, 411 (1992); from memory, the test simulates them.
_MAD_FACTORS = (1.196, 1.495, 1.363, 1.206, 1.200, 1.140, 1.129, 1.107)
HAMPEL_SDS = 3.0


def middle(ordered: Sequence[float]) -> float:
    """Median of values in ascending order; at least one."""
    n = len(ordered)
    return 0.5 * (ordered[(n - 1) // 2] + ordered[n // 2])


def mad_sd(values: Sequence[float], about: float | None = None) -> float:
    """Standard deviation from the median absolute deviation, corrected for few values.

    Parameters
    ----------
    values : (n,) n >= 2
    about : their median, where it is known already

    Returns
    -------
    float, unit of the values; unbiased within 1 % for normal values from n = 3 on
    """
    n = len(values)
    centre = middle(sorted(values)) if about is None else about
    mad = middle(sorted([abs(value - centre) for value in values]))
    return MAD_TO_SD * (_MAD_FACTORS[n - 2] if n <= 9 else n / (n - 0.8)) * mad


def hampel_bounds(values: Sequence[float]) -> tuple[float, float]:
    """Within which values are no strays: 3 robust standard deviations about their median.

    Where over half of the values are equal there is nothing to tell a stray by: no bounds.

    References
    ----------
    Davies & Gather, J. Am. Stat. Assoc. 88, 782 (1993).
    """
    centre = middle(sorted(values))
    bound = HAMPEL_SDS * mad_sd(values, centre)
    return (centre - bound, centre + bound) if bound > 0.0 else (-math.inf, math.inf)


def allan_deviation(values: Floats, m: int) -> float:
    """Overlapping Allan deviation of evenly spaced values over means of m of them.

    Parameters
    ----------
    values : (n,) float64
    m : values a mean, >= 1

    Returns
    -------
    float, unit of the values; NaN below 2 m values

    References
    ----------
    Riley, Handbook of Frequency Stability Analysis, NIST SP 1065 (2008), eq. 11.
    """
    n = len(values)
    if n < 2 * m:
        return NAN
    sums = np.concatenate(([0.0], np.cumsum(values - values[0])))
    steps = (sums[2 * m :] - 2.0 * sums[m:-m] + sums[: -2 * m]) / m
    return math.sqrt(0.5 * float(np.mean(steps * steps)))

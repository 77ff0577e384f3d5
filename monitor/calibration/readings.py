"""Standards as the columns that a fit takes, and the noise of their readings."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from monitor.blocks import Floats
from monitor.calibration import remarks
from monitor.calibration.calibration import UNKNOWN_TEMP_U_C, CalibrationError
from monitor.calibration.model import FLOOR_SD, Rows
from monitor.water import OutOfRangeError, medium

if TYPE_CHECKING:
    from monitor.bench import Standard

TEMP_NOISE_C = 0.01  # of the mean temperature of a standard
DEFAULT_JITTER = 0.002
NO_TEMP_C = 25.0  # taken for all where nobody measured any


def read_rows(standards: Sequence[Standard], of: str, tick_us: float) -> tuple[Rows, float]:
    """The standards as columns, and the relative noise of a single reading.

    Raises CalibrationError.
    """
    if not standards:
        raise CalibrationError("no standards; expected at least one, better six")
    try:
        law = medium(of)
    except OutOfRangeError as wrong:
        raise CalibrationError(str(wrong)) from None
    remarks.refuse_wrong_figures(standards)
    salinity = np.array([s.salinity_pct for s in standards], dtype=np.float64)
    period = np.array([s.period_us for s in standards], dtype=np.float64)
    k25 = law.conductivity_25_ms(salinity)
    if not (k25 <= law.limit_ms).all():
        worst = float(salinity[~(k25 <= law.limit_ms)][0])
        top = float(law.salinity_pct(np.array([law.limit_ms]))[0])
        raise CalibrationError(
            f"standard of {worst:g} %: beyond the law of {of}; expected at most {top:.2g} %"
        )
    known = [s.temp_c for s in standards if s.temp_c is not None]
    mean = math.fsum(known) / len(known) if known else NO_TEMP_C
    temp = np.array([mean if s.temp_c is None else s.temp_c for s in standards])
    noise = [UNKNOWN_TEMP_U_C if s.temp_c is None and known else TEMP_NOISE_C for s in standards]
    jitter = jitter_of(standards, tick_us)
    count = np.array([s.readings for s in standards], dtype=np.float64)
    rows = Rows(
        salinity_pct=salinity,
        period_us=period,
        k25_ms=k25,
        factor=law.factor(temp),
        sensitivity=np.array([law.sensitivity(t)[1] for t in temp.tolist()]),
        temp_noise_c=np.array(noise),
        salinity_u_pct=np.array([s.salinity_u_pct or 0.0 for s in standards]),
        reading_var=mean_var(period, count, jitter, tick_us) + FLOOR_SD**2,
    )
    return rows, jitter


def jitter_of(standards: Sequence[Standard], tick_us: float) -> float:
    """Relative noise of a single reading, pooled; the share of the tick is taken out.

    Never one standard's own sd: a coarse tick can make that 0.
    """
    noisy = [s for s in standards if s.readings > 2 and s.sd_us is not None]
    if not noisy:
        return DEFAULT_JITTER
    spread = math.fsum((s.readings - 1) * ((s.sd_us or 0.0) ** 2 - tick_us**2 / 12) for s in noisy)
    size = math.fsum((s.readings - 1) * s.period_us**2 for s in noisy)
    return math.sqrt(max(spread / size, 1e-8))


def mean_var(period_us: Floats, readings: Floats, jitter: float, tick_us: float) -> Floats:
    """Variance of the ln of a mean period, (n,).

    A coarse tick does not average out where the noise is under 0.4 of it: what remains is the
    first term of the Fourier series of the mean error of rounding.
    """
    sd = jitter * period_us
    step = tick_us**2 / 12
    var = (sd**2 + step) / readings
    if tick_us > 0:
        var = var + step * np.exp(-4 * math.pi**2 * np.minimum(sd**2 / tick_us**2, 10.0))
    return np.asarray(var / period_us**2)

"""What a person is told about a set of standards: refusals, a wrong one, scatter, lack of fit."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from monitor.blocks import Floats
from monitor.calibration.calibration import CalibrationError
from monitor.calibration.model import Fits, Rows
from monitor.calibration.student import f_tail

if TYPE_CHECKING:
    from monitor.bench import Standard
    from monitor.calibration.hypotheses import Hypotheses

SCATTER_PCT = 0.2  # scatter of the standards beyond which it is said
LACK_OF_FIT_P = 0.05
FREE = 3  # parameters that six levels really settle: lnG, p and t0
SHORTEST_US = 2.0  # common practice, no source: such oscillators end below 500 kHz
UNIT_STEPS = (1e-6, 1e-3, 1e3, 1e6)  # s, ms for us and the reverse


def refuse_wrong_figures(standards: Sequence[Standard]) -> None:
    """Raise CalibrationError for a figure that no standard can have."""
    for i, s in enumerate(standards, 1):
        if not (math.isfinite(s.period_us) and s.period_us > 0):
            raise CalibrationError(f"standard {i}: period {s.period_us:g} us; expected above 0")
        if s.period_us < SHORTEST_US:
            raise CalibrationError(
                f"standard {i}: period {s.period_us:g} us: looks like ms or s; expected us"
            )
        if not (math.isfinite(s.salinity_pct) and s.salinity_pct >= 0):
            raise CalibrationError(
                f"standard {i}: salinity {s.salinity_pct:g} %; expected 0 or more"
            )
        if s.temp_c is not None and not -5 <= s.temp_c <= 60:
            raise CalibrationError(f"standard {i}: temp_c {s.temp_c:g}; expected -5 to 60")


def contradiction(rows: Rows, fits: Fits, heaviest: int) -> str:
    """Why no calibration fits these standards."""
    worst = int(np.argmax(np.abs(fits.residual[heaviest])))
    off = float(fits.residual[heaviest, worst])
    u = math.sqrt(fits.variance[heaviest, worst])
    units = mixed_units(rows.period_us)
    hint = f"; {units}" if units else ""
    return (
        f"the standards contradict each other, by no probe's law: standard {worst + 1}"
        f" ({rows.salinity_pct[worst]:g} %) is the worst, its period"
        f" {_apart(off, u)} than the others let expect{hint};"
        " expected the period to fall as salinity rises (two swapped?)"
    )


def no_fit(rows: Rows) -> str:
    """Why there is no fit at all."""
    units = mixed_units(rows.period_us)
    why = units or "a figure among them leads beyond all bounds"
    return f"no fit of these standards: {why}; expected a period that falls as salinity rises"


def mixed_units(period_us: Floats) -> str:
    """A line if some periods look as if they were in another unit, else ''."""
    middle = float(np.median(period_us))
    for i, period in enumerate(period_us.tolist(), 1):
        for step in UNIT_STEPS:
            if abs(math.log(period * step / middle)) < 1.5 < abs(math.log(period / middle)) - 3:
                return f"standard {i}: {period:g} looks like another unit than us"
    return ""


def of_fit(
    standards: Sequence[Standard],
    rows: Rows,
    fits: Fits,
    weight: Floats,
    hypotheses: Hypotheses,
    scatter: Floats,
    tau_pct: Sequence[float],
) -> tuple[str, ...]:
    """All remarks on a fit, a line each."""
    lines = [wrong_standard(rows, fits, weight, hypotheses)]
    size = float(scatter @ np.array(tau_pct))
    if size > SCATTER_PCT:
        lines.append(
            f"the standards scatter by {size:.2g} %; weigh a new set or state salinity_u_pct"
        )
    p = lack_of_fit(rows, fits, int(np.argmax(weight)), hypotheses)
    if p < LACK_OF_FIT_P:
        lines.append(
            f"lack of fit: the levels miss the model by more than repeats differ (F, p {p:.2g})"
        )
    solutions = len(np.unique(rows.salinity_pct))
    if solutions < 4:
        lines.append(f"only {solutions} solutions: the doubt is wide and none of them is checked")
    missing = sum(1 for s in standards if s.temp_c is None)
    if missing == len(standards):
        lines.append("no standard has a temperature: 25 C is taken for all, +- 1 C")
    elif missing:
        lines.append(f"{missing} standards without temperature: the others' mean is taken, +- 1 C")
    if all(s.salinity_u_pct is None for s in standards):
        lines.append("no standard states salinity_u_pct: their salinities count as exact")
    return tuple(line for line in lines if line)


def wrong_standard(rows: Rows, fits: Fits, weight: Floats, hypotheses: Hypotheses) -> str:
    """The sentence on an outlying standard, '' if there is none."""
    by_group = np.bincount(hypotheses.wrong, weight, len(hypotheses.groups) + 1)
    if by_group[0] >= 0.9:
        return ""
    i = int(np.argmax(by_group[1:]))
    off, u = left_out(fits, weight, hypotheses, i)
    group = hypotheses.groups[i]
    which = f"the {rows.salinity_pct[group[0]]:g} % standard"
    if len(group) == 1 and (rows.salinity_pct == rows.salinity_pct[group[0]]).sum() > 1:
        which += f" of {rows.period_us[group[0]]:g} us"
    said = f"period {_apart(off, u)} than the others say"
    if units := mixed_units(rows.period_us):
        said += f" ({units})"
    if by_group[0] >= 0.5:
        return f"{which} is perhaps wrong: {said}"
    return f"{which} is wrong: {said}; left out"


def _apart(off: float, u: float) -> str:
    """A difference of ln period in words."""
    way = "longer" if off > 0 else "shorter"
    if abs(off) > 0.5:
        return f"{math.exp(abs(off)):.3g} times {way}"
    return f"{100 * abs(math.expm1(off)):.2g} +- {200 * u:.2g} % {way}"


def left_out(fits: Fits, weight: Floats, hypotheses: Hypotheses, i: int) -> tuple[float, float]:
    """Mean residual of the i-th group in the fits that leave it out, and its standard doubt."""
    which = hypotheses.wrong == i + 1
    share = weight[which] / weight[which].sum()
    group = list(hypotheses.groups[i])
    residual = fits.residual[which][:, group].mean(1)
    slope = fits.slopes[which][:, group].mean(1)
    var = fits.variance[which][:, group].mean(1) / len(group)
    var = var + np.einsum("mi,mij,mj->m", slope, np.linalg.inv(fits.a[which]), slope)
    mean = float(share @ residual)
    return mean, math.sqrt(float(share @ (var + (residual - mean) ** 2)))


def lack_of_fit(rows: Rows, fits: Fits, heaviest: int, hypotheses: Hypotheses) -> float:
    """Probability by chance of so much misfit of the levels, against that of repeats; 1 without.

    The weighted form of the F test for lack of fit: NIST/SEMATECH e-Handbook, 4.4.4.6.
    """
    used = hypotheses.use[heaviest] > 0
    salinity, r = rows.salinity_pct[used], fits.residual[heaviest][used]
    weight = 1 / fits.variance[heaviest][used]
    levels, of = np.unique(salinity, return_inverse=True)
    above, below = len(levels) - FREE, len(r) - len(levels)
    if above < 1 or below < 1:
        return 1.0
    total = np.bincount(of, weight)
    mean = np.bincount(of, weight * r) / total
    pure = float((weight * (r - mean[of]) ** 2).sum()) / below
    lack = float((total * mean**2).sum()) / above
    return f_tail(lack / max(pure, 1e-300), above, below)

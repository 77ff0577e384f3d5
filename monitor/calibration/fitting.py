"""From standards to a calibration: fits under many hypotheses, weighed by how well they explain.

Each hypothesis is one size of the standards' unstated scatter together with either no standard or
one of them wrong. The weighed fits are put together into one parameter vector and one covariance
matrix, so that a doubtful standard weighs little without anyone deciding that it is wrong.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.blocks import Floats
from monitor.calibration import remarks
from monitor.calibration.calibration import UNKNOWN_TEMP_U_C, Calibration, CalibrationError
from monitor.calibration.model import FLOOR_SD, Fits, Prior, Rows, first_prior, solve
from monitor.water import OutOfRangeError, medium

if TYPE_CHECKING:
    from monitor.bench import Standard

TAU_PCT = (0.03, 0.06, 0.12, 0.25, 0.5, 1.0)  # sizes of scatter that nobody stated
TAU_PRIOR = (0.25, 0.3, 0.2, 0.13, 0.09, 0.03)
WRONG_SOLUTION = 0.02  # prior that this solution is wrong
WRONG_ROW = 0.005  # that this row alone is, where its solution has several
FEWEST_TO_DOUBT = 4  # solutions, below which none is held to be wrong
WRONG_SCALE = 0.01  # Cauchy scale of how far a wrong standard's ln period is off
TEMP_NOISE_C = 0.01  # of the mean temperature of a standard
DEFAULT_JITTER = 0.002
WORST_Q = 25.0
NO_TEMP_C = 25.0  # taken for all where nobody measured any


class Hypotheses(NamedTuple):
    """m weighings of n rows: which rows are in use, the scatter, ln of the prior."""

    use: Floats  # (m, n)
    tau: NDArray[np.intp]  # (m,) index of TAU_PCT
    wrong: NDArray[np.intp]  # (m,) 0 = none wrong, i = the i-th of `groups` left out
    ln_prior: Floats  # (m,)
    groups: tuple[tuple[int, ...], ...]  # rows that may be wrong together


def fit(
    standards: Sequence[Standard],
    medium: str,
    tick_us: float,
    name: str | None = None,
    older: Calibration | None = None,
) -> Calibration:
    """The calibration that these standards give.

    Parameters
    ----------
    medium : "NaCl" or "sea salt"
    tick_us : resolution of a reading, us; 0 if it has none
    name : of the calibration; otherwise that of the set, or one derived from the standards
    older : a calibration of the same probe, renewed by fewer standards

    Raises
    ------
    CalibrationError
        In one line, if the standards contradict each other or allow no fit.
    """
    rows, jitter = read_rows(standards, medium, tick_us)
    if older is not None and older.medium != medium:
        raise CalibrationError(f"the older calibration is of {older.medium}, not of {medium}")
    top_us = float(rows.period_us.min())
    k0 = older.k0_ms if older else math.exp(np.log(np.maximum(rows.k25_ms, 0.001)).mean())
    prior = renewed_prior(older, top_us) if older else first_prior(top_us)
    hypotheses = hypotheses_of(rows, older.scatter if older else None)
    tau_pct = np.array(TAU_PCT)[hypotheses.tau]
    with np.errstate(all="ignore"):
        try:
            fits = solve(rows, k0, hypotheses.use, tau_pct, prior)
            weight = weights(fits, hypotheses)
        except np.linalg.LinAlgError:
            raise CalibrationError(
                "the standards allow no fit: the equations are singular"
            ) from None
    heaviest = int(np.argmax(weight))
    if not (np.isfinite(weight).all() and np.isfinite(fits.theta[heaviest]).all()):
        raise CalibrationError("the standards allow no fit: a figure went beyond all bounds")
    if fits.q[heaviest] > WORST_Q:
        raise CalibrationError(remarks.contradiction(rows, fits, heaviest))
    theta, cov = put_together(fits, weight)
    scatter = np.asarray(np.bincount(hypotheses.tau, weight, len(TAU_PCT)), dtype=np.float64)
    used = [plain(standard) for standard in standards]
    above = rows.salinity_pct[rows.salinity_pct > 0]
    temps = [s.temp_c for s in standards if s.temp_c is not None]
    made = Calibration(
        name=name or name_of(standards, medium, tick_us),
        medium=medium,
        theta=tuple(theta.tolist()),
        cov=tuple(tuple(row) for row in cov.tolist()),
        k0_ms=k0,
        temp_c=math.fsum(temps) / len(temps) if temps else NO_TEMP_C,
        temp_known=bool(temps),
        lowest_pct=float(above.min()) if len(above) else 0.0,
        highest_pct=float(above.max()) if len(above) else 0.0,
        top_us=top_us,
        jitter=jitter,
        dof=math.inf,
        tick_us=tick_us,
        scatter=tuple(scatter.tolist()),
        remarks=remarks.of_fit(standards, rows, fits, weight, hypotheses, scatter, TAU_PCT),
        date=max((s.taken for s in standards if s.taken), default=None),
        standards=tuple(used),
    )
    return replace(made, dof=degrees_of_freedom(made, fits, weight))


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


def hypotheses_of(rows: Rows, older_scatter: Sequence[float] | None) -> Hypotheses:
    """Every size of scatter with none, and with each solution and repeated row, left out."""
    solutions = [np.flatnonzero(rows.salinity_pct == s) for s in np.unique(rows.salinity_pct)]
    groups: list[tuple[int, ...]] = []
    if len(solutions) >= FEWEST_TO_DOUBT:
        groups = [tuple(same.tolist()) for same in solutions]
        groups += [(int(row),) for same in solutions if len(same) > 1 for row in same]
    priors = [WRONG_SOLUTION if i < len(solutions) else WRONG_ROW for i in range(len(groups))]
    priors = [1.0 - math.fsum(priors), *priors]
    use = np.ones((len(priors), len(rows.period_us)))
    for i, group in enumerate(groups):
        use[i + 1, list(group)] = 0.0
    of_tau = np.array(TAU_PRIOR)
    if older_scatter is not None:
        of_tau = 0.8 * np.array(older_scatter) + 0.2 * of_tau
    n_tau = len(TAU_PCT)
    with np.errstate(divide="ignore"):
        ln_prior = np.log(np.repeat(np.maximum(priors, 1e-3), n_tau)) + np.log(
            np.tile(of_tau, len(priors))
        )
    return Hypotheses(
        use=np.repeat(use, n_tau, axis=0),
        tau=np.tile(np.arange(n_tau), len(priors)),
        wrong=np.repeat(np.arange(len(priors)), n_tau),
        ln_prior=ln_prior,
        groups=tuple(groups),
    )


def weights(fits: Fits, hypotheses: Hypotheses) -> Floats:
    """How likely each hypothesis is after the standards were seen, (m,), their sum 1."""
    use, v, r = hypotheses.use, fits.variance, fits.residual
    _, ln_det = np.linalg.slogdet(fits.a)
    ln = hypotheses.ln_prior - ln_det / 2 - (use * np.log(2 * math.pi * v)).sum(1) / 2 - fits.q / 2
    out = 1.0 - use
    m = out.sum(1)
    left = m > 0
    mean = (out * r).sum(1) / np.maximum(m, 1)
    ln_out = -np.log(math.pi * WRONG_SCALE * (1 + (mean / WRONG_SCALE) ** 2))
    ln_out -= (out * (r - mean[:, None]) ** 2 / (2 * v)).sum(1)
    typical = (out * np.log(2 * math.pi * v)).sum(1) / np.maximum(m, 1)
    ln_out -= (m - 1) / 2 * typical + np.log(np.maximum(m, 1)) / 2
    ln = ln + np.where(left, ln_out, 0.0)
    weight = np.exp(ln - ln.max())
    return np.asarray(weight / weight.sum())


def put_together(fits: Fits, weight: Floats) -> tuple[Floats, Floats]:
    """Mean and covariance of theta over the hypotheses that matter."""
    kept = weight >= weight.max() / 1000
    share = weight[kept] / weight[kept].sum()
    theta = share @ fits.theta[kept]
    away = fits.theta[kept] - theta
    cov = np.einsum("m,mij->ij", share, np.linalg.inv(fits.a[kept]))
    cov = cov + np.einsum("m,mi,mj->ij", share, away, away)
    return theta, (cov + cov.T) / 2


def degrees_of_freedom(made: Calibration, fits: Fits, weight: Floats) -> float:
    """Effective degrees of freedom of u in the middle of the standards, as the GUM words it.

    From the spread of the variance over the hypotheses: that of a mixture of normal laws whose
    kurtosis is Student's.
    """
    slopes = made.slopes(
        made.period_us((made.lowest_pct + made.highest_pct) / 2, made.temp_c), made.temp_c
    )
    if slopes is None:
        return math.inf
    kept = weight >= weight.max() / 1000
    d = np.array(slopes.theta)
    var = np.einsum("i,mij,j->m", d, np.linalg.inv(fits.a[kept]), d)
    share = weight[kept] / weight[kept].sum()
    k = float(share @ var**2) / float(share @ var) ** 2
    return (4 * k - 2) / (k - 1) if k > 1 + 1e-6 else math.inf


def renewed_prior(older: Calibration, top_us: float) -> Prior:
    """What an older calibration of the same probe says beforehand; a probe ages."""
    ageing = np.array([0.004 * top_us, 1.0, 0.003, 0.001, 0.0003])
    cov = np.array(older.cov) + np.diag(ageing**2)
    return Prior(np.array(older.theta), np.linalg.inv(cov))


def plain(standard: Standard) -> dict[str, Any]:
    """A standard as JSON-able fields."""
    return standard.model_dump(mode="json", exclude_none=True)


def name_of(standards: Sequence[Standard], medium: str, tick_us: float) -> str:
    """The name of the set; where the standards have none, one derived from all that was fitted."""
    sets = {s.set for s in standards}
    named = sets.pop() if len(sets) == 1 else None
    text = json.dumps([[plain(s) for s in standards], medium, tick_us], sort_keys=True)
    digest = hashlib.sha256(text.encode()).hexdigest()[:8]
    return f"{named}-{digest}" if named else f"c-{digest}"

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
from typing import TYPE_CHECKING, Any

import numpy as np

from monitor.blocks import Floats
from monitor.calibration import remarks
from monitor.calibration.calibration import Calibration, CalibrationError
from monitor.calibration.hypotheses import TAU_PCT, Hypotheses, hypotheses_of, weights
from monitor.calibration.model import LONG_T0, Fits, Prior, Rows, first_prior, solve
from monitor.calibration.readings import NO_TEMP_C, read_rows

if TYPE_CHECKING:
    from monitor.bench import Standard

WORST_Q = 25.0


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
    with np.errstate(all="ignore"):  # what overflows is found by its result
        rows, jitter = read_rows(standards, medium, tick_us)
    if older is not None and older.medium != medium:
        raise CalibrationError(f"the older calibration is of {older.medium}, not of {medium}")
    top_us = float(rows.period_us.min())
    k0 = older.k0_ms if older else math.exp(np.log(np.maximum(rows.k25_ms, 0.001)).mean())
    hypotheses = hypotheses_of(rows, older.scatter if older else None)
    if older is not None:
        fits, weight = weighed_fits(rows, k0, hypotheses, renewed_prior(older, top_us))
    else:
        fits, weight = weighed_fits(rows, k0, hypotheses, first_prior(top_us))
        if misfit(fits, weight) > WORST_Q:
            other = weighed_fits(rows, k0, hypotheses, first_prior(top_us, LONG_T0))
            fits, weight = other if misfit(*other) <= WORST_Q else (fits, weight)
    if misfit(fits, weight) > WORST_Q:
        raise CalibrationError(remarks.contradiction(rows, fits, int(np.argmax(weight))))
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


def weighed_fits(
    rows: Rows, k0: float, hypotheses: Hypotheses, prior: Prior
) -> tuple[Fits, Floats]:
    """The fits under all hypotheses and how likely each is. Raises CalibrationError."""
    tau_pct = np.array(TAU_PCT)[hypotheses.tau]
    with np.errstate(all="ignore"):
        try:
            fits = solve(rows, k0, hypotheses.use, tau_pct, prior)
            weight = weights(fits, hypotheses)
        except np.linalg.LinAlgError:
            raise CalibrationError(remarks.no_fit(rows)) from None
    if not (np.isfinite(weight).all() and np.isfinite(fits.theta[np.argmax(weight)]).all()):
        raise CalibrationError(remarks.no_fit(rows))
    return fits, weight


def misfit(fits: Fits, weight: Floats) -> float:
    """Q of the likeliest hypothesis."""
    return float(fits.q[int(np.argmax(weight))])


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

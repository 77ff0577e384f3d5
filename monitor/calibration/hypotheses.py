"""What may be wrong with a set of standards, and how likely that is once they were seen."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.blocks import Floats
from monitor.calibration.model import Fits, Rows

TAU_PCT = (0.03, 0.06, 0.12, 0.25, 0.5, 1.0)  # sizes of scatter that nobody stated
TAU_PRIOR = (0.25, 0.3, 0.2, 0.13, 0.09, 0.03)
WRONG_SOLUTION = 0.02  # prior that this solution is wrong
WRONG_ROW = 0.005  # that this row alone is, where its solution has several
FEWEST_TO_DOUBT = 4  # solutions, below which none is held to be wrong
WRONG_SCALE = 0.01  # Cauchy scale of how far a wrong standard's ln period is off


class Hypotheses(NamedTuple):
    """m weighings of n rows: which rows are in use, the scatter, ln of the prior."""

    use: Floats  # (m, n)
    tau: NDArray[np.intp]  # (m,) index of TAU_PCT
    wrong: NDArray[np.intp]  # (m,) 0 = none wrong, i = the i-th of `groups` left out
    ln_prior: Floats  # (m,)
    groups: tuple[tuple[int, ...], ...]  # rows that may be wrong together


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

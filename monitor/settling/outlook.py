"""When rest will come: from the mass balance first, then from the models."""

from __future__ import annotations

import math

import numpy as np

from monitor.settling.models import DELAY_S
from monitor.settling.rest import Judgement

HEAVIEST = 10
LOOKS = 61  # moments ahead
SHORTEST_S, LONGEST_S = 60.0, 900.0  # how far ahead to look
_SPREAD = np.array([-1.4, 0.0, 1.4])  # sds of what is still to come
_SHARE = np.array([0.25, 0.5, 0.25])


def rest_in_before(to_run_s: float, step_pct: float, band: float) -> tuple[float, float]:
    """Seconds until rest and their u95 before the readings tell: of tanks at large.

    Parameters
    ----------
    to_run_s : s until the dose has run in
    step_pct : % by which it moves the tank
    band : % that counts as rest
    """
    folds = math.log(max(abs(step_pct), 1.05 * band) / band)
    return to_run_s + DELAY_S + 16.0 * folds, max(60.0 * folds, 3.0)


def rest_in(judgement: Judgement, band: float) -> tuple[float, float]:
    """Seconds from the last reading until rest, and their u95, by the heaviest models."""
    models = judgement.likeliest
    heavy = np.argsort(-models.weight, kind="stable")[:HEAVIEST]
    weight = models.weight[heavy] / models.weight[heavy].sum()
    tau = models.bank.tau[heavy]
    horizon = min(max(5.0 * float(tau[weight > 0.02].max()), SHORTEST_S), LONGEST_S)
    ahead = np.linspace(0.0, horizon, LOOKS)
    shapes = models.bank.take(heavy).shapes(models.x + ahead[:, None])
    left = np.einsum("ikh,ih->kh", shapes, models.c[1:, heavy])
    spread = np.einsum("ijh,jkh->ikh", models.cov[1:, 1:, heavy], shapes)
    sd = np.sqrt(np.maximum((spread * shapes).sum(axis=0), 0.0))
    outside = np.abs(left)[..., None] + sd[..., None] * _SPREAD > band
    last = np.where(outside.any(axis=0), len(ahead) - 1 - outside[::-1].argmax(axis=0), 0)
    return _weighted(ahead[last].ravel(), (weight[:, None] * _SHARE).ravel())


def _weighted(times: np.ndarray, weight: np.ndarray) -> tuple[float, float]:
    """Weighted median, and half of the range that holds 95 %."""
    order = np.argsort(times, kind="stable")
    sums = np.cumsum(weight[order])
    low, middle, high = times[order][
        np.searchsorted(sums, np.array([0.025, 0.5, 0.975]) * sums[-1])
    ]
    return float(middle), max(0.5 * float(high - low), 3.0)

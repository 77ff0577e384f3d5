"""Has it come to rest: what the weighed models and the recorded dose say together."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from monitor.blocks import Floats
from monitor.settling.fit import Models
from monitor.settling.models import TERMS

INSIDE = 0.95  # of the band: what is still to come has to stay inside this
NEEDED = 4  # judgements in a row
_LANDING = np.zeros((TERMS, 1))
_LANDING[0] = 1.0


@dataclass(frozen=True)
class Expected:
    """A step that something foretells (the recorded dose): mean and sd in %, and the odds for it
    against a step of any size."""

    step_pct: float
    sd_pct: float
    odds: float


@dataclass(frozen=True)
class Judgement:
    """What one fit says after one reading."""

    free: Models  # the readings alone
    expected: tuple[Expected, ...]
    p_expected: tuple[float, ...]  # that each expected step is the true one
    p_rest: float  # that it is at rest
    p_rest_free: float  # the same by the readings alone
    landing: tuple[float, float]  # mean and sd of the step, all together
    landing_free: tuple[float, float]

    @property
    def p_told(self) -> float:
        """Probability that one of the expected steps is the true one."""
        return sum(self.p_expected)

    @property
    def likeliest(self) -> Models:
        """The models with the likeliest expected step, or without if that is likelier."""
        p = max(self.p_expected, default=0.0)
        if p < 0.5:
            return self.free
        step = self.expected[self.p_expected.index(p)]
        return self.free.observed(_LANDING, step.step_pct, step.sd_pct**2)


def judge(free: Models, expected: tuple[Expected, ...], scale: float, band: float) -> Judgement:
    """Put the models and the expected steps together.

    Parameters
    ----------
    free : the fit's models
    expected : the steps that were foretold
    scale : % size of the step, for the spread of a step that nothing foretells
    band : % that counts as rest, either side

    Notes
    -----
    An expected step is one more observation of c0; for J of them and H models everything is a
    rank-1 update of (J, H) figures.
    """
    step = np.array([[e.step_pct] for e in expected]).reshape(-1, 1)
    sd = np.array([[e.sd_pct] for e in expected]).reshape(-1, 1)
    off, total = step - free.c[0], free.cov[0, 0] + sd**2
    fits = free.weight * np.exp(-0.5 * off**2 / total) / np.sqrt(total)
    any_var = (3.0 * scale) ** 2 + sd[:, 0] ** 2
    any_step = np.exp(-0.5 * step[:, 0] ** 2 / any_var) / np.sqrt(any_var)
    odds = np.array([e.odds for e in expected]) * fits.sum(axis=1) / any_step
    share = np.append(odds, 1.0) / (odds.sum() + 1.0)  # the last: none of them

    gain = off / total
    told = fits / np.maximum(fits.sum(axis=1, keepdims=True), 1e-300)
    weight = np.vstack([told, free.weight])
    p_rest = (_chances(free, gain, total, band) * weight).sum(axis=1)
    mean = np.vstack([free.c[0] + free.cov[0, 0] * gain, free.c[0]])
    var = np.vstack([free.cov[0, 0] * sd**2 / total, free.cov[0, 0]])
    return Judgement(
        free,
        expected,
        tuple(share[:-1].tolist()),
        float(share @ p_rest),
        float(p_rest[-1]),
        _moments(share[:, None] * weight, mean, var),
        _moments(weight[-1], mean[-1], var[-1]),
    )


def plateau(models: Models, band: float) -> tuple[float, float]:
    """The step and its sd, given that the tank is at rest: never by the recorded dose."""
    row = np.zeros_like(models.c)
    row[1:] = models.bank.shapes(np.array([[models.x]]))[:, 0]
    return models.observed(row, 0.0, (0.5 * band) ** 2).landing()


def rested_x(judgement: Judgement, band: float) -> float:
    """When rest began by the heaviest models, on the time axis of the fit."""
    models = judgement.likeliest
    heavy = np.argsort(-models.weight, kind="stable")[:10]
    weight = models.weight[heavy] / models.weight[heavy].sum()
    x = np.arange(0.0, math.floor(models.x) + 1.0)
    shapes = models.bank.take(heavy).shapes(x[:, None])
    left = np.einsum("ikh,ih,h->k", shapes, models.c[1:, heavy], weight)
    outside = np.flatnonzero(np.abs(left) > band)
    return float(x[outside[-1]]) + 1.0 if outside.size else -2.0


def chance_within(mean: Floats, sd: Floats, bound: float) -> Floats:
    """P(|r| < bound) of normals, within 2e-7.

    References
    ----------
    Abramowitz and Stegun, Handbook of Mathematical Functions (1964), 7.1.26.
    """
    z = np.stack([bound - mean, bound + mean]) / (math.sqrt(2.0) * sd)
    np.clip(z, -5.0, 5.0, out=z)
    u = 1.0 / (1.0 + 0.3275911 * np.abs(z))
    poly = 1.061405429 * u - 1.453152027
    poly = (((poly * u + 1.421413741) * u - 0.284496736) * u + 0.254829592) * u
    erf = np.copysign(1.0 - poly * np.exp(-z * z), z)
    chance: Floats = 0.5 * (erf[0] + erf[1])
    return chance


def _chances(free: Models, gain: Floats, total: Floats, band: float) -> Floats:
    """Chance that what is still to come stays inside the band, (J + 1, H); the last without any.

    `gain` and `total` (J, H): of the update of c0 by each expected step.
    """
    shapes = free.bank.shapes(free.x + free.bank.ahead)  # (4, K, H)
    mean = (shapes * free.c[1:, None]).sum(axis=0)
    spread = (free.cov[1:, 1:, None] * shapes).sum(axis=1)
    var = (spread * shapes).sum(axis=0)
    with_c0 = (shapes * free.cov[1:, 0, None]).sum(axis=0)  # covariance with the landing
    means = np.concatenate([mean + with_c0 * gain[:, None], mean[None]])
    variances = np.concatenate([var - with_c0**2 / total[:, None], var[None]])
    sd = np.sqrt(np.maximum(variances, 1e-30))
    chances: Floats = chance_within(means, sd, INSIDE * band).min(axis=1)
    return chances


def _moments(weight: Floats, mean: Floats, var: Floats) -> tuple[float, float]:
    """Mean and standard deviation of a mixture of normals."""
    middle = float((weight * mean).sum())
    return middle, math.sqrt(max(float((weight * (var + (mean - middle) ** 2)).sum()), 0.0))

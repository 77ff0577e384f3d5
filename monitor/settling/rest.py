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
ANYTHING = 1e6  # %^2, variance of a step that nothing foretells
TINY = 1e-30  # %^2, least variance
_LANDING = np.zeros((TERMS, 1))
_LANDING[0] = 1.0


@dataclass(frozen=True)
class Expected:
    """A step that something foretells (the recorded dose): mean and sd in %, and the odds for it
    against a step of any size."""

    step_pct: float
    sd_pct: float
    odds: float


class Foretold:
    """The expected steps as columns of figures, one row each, and a last row for none of them."""

    def __init__(self, expected: tuple[Expected, ...], scale_pct: float) -> None:
        """`scale_pct`: size of the step, for the spread of a step that nothing foretells."""
        self.expected = expected
        self.step = np.array([[e.step_pct] for e in expected] + [[0.0]])
        self.var = np.array([[e.sd_pct**2] for e in expected] + [[ANYTHING]])
        any_var = 9.0 * scale_pct**2 + self.var
        any_step = np.exp(-0.5 * self.step**2 / any_var) / np.sqrt(any_var)
        self.odds = np.array([[e.odds] for e in expected] + [[1.0]]) / any_step
        self.odds[-1] = 1.0


@dataclass(frozen=True)
class Judgement:
    """What one fit says after one reading."""

    free: Models  # the readings alone
    foretold: Foretold
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
        step = self.foretold.expected[self.p_expected.index(p)]
        return self.free.observed(_LANDING, step.step_pct, step.sd_pct**2)


def judge(free: Models, foretold: Foretold, band: float) -> Judgement:
    """Put the models and the expected steps together. `band`: % that counts as rest, either side.

    An expected step is one more observation of c0: for J of them and H models everything is a
    rank-1 update of (J, H) figures. The last row is the readings alone.
    """
    c0, var0 = free.c[0], free.cov[0, 0]
    total = var0 + foretold.var
    gain = (foretold.step - c0) / total
    weight = free.weight * np.exp(-0.5 * gain * gain * total) / np.sqrt(total)
    weight[-1] = free.weight
    sums = weight.sum(axis=1, keepdims=True)
    weight /= np.maximum(sums, 1e-300)
    share = foretold.odds * sums
    share /= share.sum()

    p_rest = (_chances(free, gain, total, band) * weight).sum(axis=1, keepdims=True)
    mean = c0 + var0 * gain
    var = var0 * foretold.var / total
    return Judgement(
        free,
        foretold,
        tuple(share[:-1, 0].tolist()),
        float((share * p_rest).sum()),
        float(p_rest[-1, 0]),
        _moments(share * weight, mean, var),
        _moments(free.weight, c0, var0),
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


def chance_within(mean: Floats, var: Floats, bound: float) -> Floats:
    """P(|r| < bound) of normals, within 2e-7.

    References
    ----------
    Abramowitz and Stegun, Handbook of Mathematical Functions (1964), 7.1.26.
    """
    z = np.empty((2, *mean.shape))
    scale = np.sqrt(0.5 / var)
    np.multiply(bound - mean, scale, out=z[0])
    np.multiply(bound + mean, scale, out=z[1])
    u = 1.0 / (1.0 + 0.3275911 * np.abs(z))
    poly = 1.061405429 * u - 1.453152027
    poly *= u
    poly += 1.421413741
    poly *= u
    poly -= 0.284496736
    poly *= u
    poly += 0.254829592
    poly *= u
    erf = np.copysign(1.0 - poly * np.exp(-z * z), z)
    chance: Floats = 0.5 * (erf[0] + erf[1])
    return chance


def _chances(free: Models, gain: Floats, total: Floats, band: float) -> Floats:
    """Chance that what is still to come stays inside the band, (J, H).

    `gain` and `total` (J, H): of the update of c0 by each expected step.
    """
    shapes = free.bank.shapes(free.x + free.bank.ahead)  # (4, K, H)
    mean = (shapes * free.c[1:, None]).sum(axis=0)
    spread = (free.cov[:, 1:, None] * shapes).sum(axis=1)  # (5, K, H), with every coefficient
    var = (spread[1:] * shapes).sum(axis=0)
    means = mean + spread[0] * gain[:, None]
    variances = np.maximum(var - spread[0] ** 2 / total[:, None], TINY)
    chances: Floats = chance_within(means, variances, INSIDE * band).min(axis=1)
    return chances


def _moments(weight: Floats, mean: Floats, var: Floats) -> tuple[float, float]:
    """Mean and standard deviation of a mixture of normals."""
    middle = float((weight * mean).sum())
    return middle, math.sqrt(max(float((weight * (var + (mean - middle) ** 2)).sum()), 0.0))

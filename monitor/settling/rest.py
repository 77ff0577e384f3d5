"""Has it come to rest: what the weighed models and the recorded dose say together."""

from __future__ import annotations

import math
from collections.abc import Sequence
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
    told: tuple[tuple[float, Models], ...]  # with each expected step: its probability, the models
    p_rest: float  # that it is at rest
    p_rest_free: float  # the same by the readings alone
    landing: tuple[float, float]  # mean and sd of the step, all together
    landing_free: tuple[float, float]

    @property
    def p_told(self) -> float:
        """Probability that one of the expected steps is the true one."""
        return sum(p for p, _ in self.told)

    @property
    def likeliest(self) -> Models:
        """The models with the likeliest expected step, or without if that is likelier."""
        p, models = max(self.told, key=lambda pair: pair[0], default=(0.0, self.free))
        return models if p >= 0.5 else self.free


def judge(free: Models, expected: Sequence[Expected], scale: float, band: float) -> Judgement:
    """Put the models and the expected steps together.

    Parameters
    ----------
    free : the fit's models
    expected : the steps that were foretold
    scale : % size of the step, for the spread of a step that nothing foretells
    band : % that counts as rest, either side
    """
    told = [free.observed(_LANDING, e.step_pct, e.sd_pct**2) for e in expected]
    odds = [
        e.odds * math.exp(min(with_.ln_evidence - free.ln_evidence - _ln_any(e, scale), 500.0))
        for e, with_ in zip(expected, told)
    ]
    total = 1.0 + sum(odds)
    shapes = free.bank.shapes(free.x + free.bank.ahead)
    p_free = _p_rest(free, shapes, band)
    parts = [(o / total, models) for o, models in zip(odds, told)]
    p = p_free / total + sum(part * _p_rest(models, shapes, band) for part, models in parts)
    landing_free = free.landing()
    landings = [(1.0 / total, landing_free), *((part, m.landing()) for part, m in parts)]
    return Judgement(free, tuple(parts), p, p_free, _mixed(landings), landing_free)


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
    u = 1.0 / (1.0 + 0.3275911 * np.abs(z))
    poly = 1.061405429 * u - 1.453152027
    poly = (((poly * u + 1.421413741) * u - 0.284496736) * u + 0.254829592) * u
    erf = np.copysign(1.0 - poly * np.exp(-z * z), z)
    chance: Floats = 0.5 * (erf[0] + erf[1])
    return chance


def _p_rest(models: Models, shapes: Floats, band: float) -> float:
    """Weighted chance that what is still to come stays inside the band from now on."""
    mean = np.einsum("ikh,ih->kh", shapes, models.c[1:])
    spread = np.einsum("ijh,jkh->ikh", models.cov[1:, 1:], shapes)
    var = (spread * shapes).sum(axis=0)
    chance = chance_within(mean, np.sqrt(np.maximum(var, 1e-30)), INSIDE * band)
    return float(models.weight @ chance.min(axis=0))


def _ln_any(expected: Expected, scale: float) -> float:
    """ln density of the expected step where any step would do."""
    var = 9.0 * scale * scale + expected.sd_pct**2
    return -0.5 * (expected.step_pct**2 / var + math.log(2 * math.pi * var))


def _mixed(parts: Sequence[tuple[float, tuple[float, float]]]) -> tuple[float, float]:
    mean = sum(p * m for p, (m, _) in parts)
    return mean, math.sqrt(sum(p * (sd * sd + (m - mean) ** 2) for p, (m, sd) in parts))

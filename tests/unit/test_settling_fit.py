"""The fit's arithmetic against the same thing done another way: whole matrices, whole samples."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from monitor.blocks import Floats
from monitor.settling.fit import EDDIES, SWITCH, Fit
from monitor.settling.models import LOOP, PLUME, SETTLE_S, SINGLE, TERMS, bank
from monitor.settling.rest import Expected, Foretold, chance_within, judge, plateau

OPEN_S, SCALE, EXTRA, FLOOR_VAR = 30.0, 0.01, 0.002, 1e-8
X = np.array([0.0, 1.0, 2.0, 3.0, 5.0, 9.0, 10.0, 11.0, 14.0, 15.0])


def readings() -> Floats:
    rng = np.random.default_rng(3)
    y: Floats = 0.01 * (1.0 - 0.5 * np.exp(-X / 12.0)) + 2e-4 * rng.standard_normal(X.size)
    return y


def turbulence_cov(tau: float, level: float) -> Floats:
    """Covariance of the turbulence over X as the filter's own recursion defines it."""
    var = EDDIES * (level * (SCALE + EXTRA)) ** 2 * np.exp(-2.0 * (X + SETTLE_S) / tau)
    own = np.empty(X.size)
    own[0] = var[0]
    fades = np.ones((X.size, X.size))
    for i in range(1, X.size):
        steps = X[i] - X[i - 1]
        fade = math.exp(-(0.25 + 1.0 / tau) * steps)
        own[i] = fade**2 * own[i - 1] + var[i] * (1.0 - math.exp(-0.5 * steps))
        fades[i, :i] = fades[i - 1, :i] * fade
    lower = np.tril(fades) * own[None, :]
    return np.tril(lower) + np.tril(lower, -1).T


@pytest.mark.parametrize("model", [0, 20, 35, 50, 75])
def test_recursion_equals_generalised_least_squares(model: int) -> None:
    """Rawlings, Pantula and Dickey, Applied Regression Analysis (1998), 12.5; from memory."""
    fit, models, y = Fit(OPEN_S, SCALE, EXTRA, FLOOR_VAR), bank(), readings()
    for x, value in zip(X, y):
        assert fit.add(float(x), float(value))
    cov_y = turbulence_cov(models.tau[model], models.level[model])
    cov_y += FLOOR_VAR * np.eye(X.size)
    one = models.take(np.array([model]))
    design = np.column_stack([np.ones(X.size), one.shapes(X[:, None])[..., 0].T])
    prior = one.prior(OPEN_S, SCALE, EXTRA)[0]
    normal = design.T @ np.linalg.solve(cov_y, design) + prior
    c = np.linalg.solve(normal, design.T @ np.linalg.solve(cov_y, y))
    cov = np.linalg.inv(normal)
    scale = np.sqrt(np.diag(cov))
    got = fit.squares
    np.testing.assert_allclose(got.c[:, model] / scale, c / scale, atol=1e-6)
    np.testing.assert_allclose(
        got.cov[..., model] / np.outer(scale, scale), cov / np.outer(scale, scale), atol=1e-6
    )
    rss = y @ np.linalg.solve(cov_y + design @ np.linalg.solve(prior, design.T), y)
    assert got.rss[model] == pytest.approx(rss, rel=1e-6)


def test_weights_are_the_chances_of_the_readings_but_for_what_is_lent() -> None:
    """Multivariate normal density of two readings, by SciPy."""
    fit, models, y = Fit(OPEN_S, SCALE, EXTRA, FLOOR_VAR), bank(), readings()
    fit.add(0.0, float(y[0]))
    prior = models.prior(OPEN_S, SCALE, EXTRA)
    ln = []
    for m in range(models.tau.size):
        design = np.append(1.0, models.shapes(np.zeros((1, 1)))[:, 0, m])
        var = turbulence_cov(models.tau[m], models.level[m])[0, 0] + FLOOR_VAR
        var += design @ np.linalg.solve(prior[m], design)
        ln.append(stats.norm.logpdf(y[0], 0.0, math.sqrt(var)))
    weight = models.weight * np.exp(ln)
    weight = (1.0 - SWITCH) * weight / weight.sum() + SWITCH * models.weight
    np.testing.assert_allclose(fit.weight, weight, rtol=1e-6)


def test_the_bank_is_what_it_says() -> None:
    models = bank()
    assert [int((models.kind == kind).sum()) for kind in (SINGLE, LOOP, PLUME)] == [28, 36, 12]
    assert models.weight.sum() == pytest.approx(1.0)
    for kind in (SINGLE, LOOP, PLUME):
        assert models.weight[models.kind == kind].sum() == pytest.approx(1 / 3)
    at_start = models.shapes(np.zeros((1, 1)))[:, 0]
    assert np.all(at_start[0] == 1.0)
    assert np.all(at_start[1][models.kind != PLUME] == 0.0)
    assert np.all(at_start[2][models.kind == PLUME] == 0.0)
    late = models.shapes(np.full((1, 1), 1e4))
    assert np.all(np.abs(late) < 1e-5)


def test_a_prior_says_that_nothing_had_moved_before_the_dose() -> None:
    """A poured dose: at its own time the curve has to stand where it stood before."""
    models = bank()
    normal = models.prior(0.5, SCALE, 0.0)
    single = int(np.flatnonzero((models.kind == SINGLE) & (models.tau > 19.0))[0])
    still = np.array([SCALE, -SCALE * math.exp(-1.1 / models.tau[single]), 0.0, 0.0, 0.0])
    jumped = np.array([SCALE, 0.0, 0.0, 0.0, 0.0])
    assert still @ normal[single] @ still < 1.0
    assert jumped @ normal[single] @ jumped > 5.0


def test_chances_are_those_of_the_normal() -> None:
    """SciPy's normal distribution function; the bound of Abramowitz and Stegun 7.1.26."""
    rng = np.random.default_rng(1)
    mean, sd = rng.normal(0.0, 2e-3, 500), np.exp(rng.uniform(-12.0, -5.0, 500))
    wanted = stats.norm.cdf((1e-3 - mean) / sd) - stats.norm.cdf((-1e-3 - mean) / sd)
    np.testing.assert_allclose(chance_within(mean, sd**2, 1e-3), wanted, atol=3e-7)
    assert chance_within(np.zeros(1), np.full(1, 1e-30), 1e-3)[0] == pytest.approx(1.0)


def test_an_expected_step_is_one_more_observation() -> None:
    """Bayes over two hypotheses done one model at a time, with SciPy's normal density."""
    fit, y = Fit(OPEN_S, SCALE, EXTRA, FLOOR_VAR), readings()
    for x, value in zip(X, y):
        fit.add(float(x), float(value))
    free = fit.models()
    told = Expected(0.0095, 2e-4, 20.0)
    said = judge(free, Foretold((told,), SCALE), 0.001)
    c0, var = free.c[0], free.cov[0, 0]
    near = stats.norm.pdf(told.step_pct, c0, np.sqrt(var + told.sd_pct**2)) @ free.weight
    far = stats.norm.pdf(told.step_pct, 0.0, math.hypot(3.0 * SCALE, told.sd_pct))
    odds = told.odds * near / far
    assert said.p_told == pytest.approx(odds / (1.0 + odds), rel=1e-9)
    assert said.likeliest.landing()[0] == pytest.approx(told.step_pct, abs=3e-4)
    assert said.landing_free == pytest.approx(free.landing())
    level, sd = plateau(free, 0.001)
    assert abs(level - y[-1]) < 0.0015
    assert 0.0 < sd < free.landing()[1]


def test_a_stray_reading_is_left_out_and_a_lasting_jump_is_not() -> None:
    fit = Fit(0.5, SCALE, 0.0, FLOOR_VAR)
    took = []
    for x in range(40):
        y = 0.01 * (1.0 - math.exp(-(x + 4.5) / 6.0))
        took.append(fit.add(float(x), y + (0.006 if x == 20 or x >= 30 else 0.0)))
    assert took.index(False) == 20
    assert all(took[21:30])
    assert took[30:35] == [False] * 5
    assert took[35]


def test_terms_are_five() -> None:
    assert bank().prior(1.0, 1.0, 0.0).shape == (76, TERMS, TERMS)

"""Student's t and Fisher's F against SciPy."""

from __future__ import annotations

import math

import pytest
from scipy import stats

from monitor.calibration.student import f_tail, incomplete_beta, t_cdf, t_quantile

FREEDOM = [0.5, 1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 7.0, 16.7, 50.0, 93.0, 1e4]


@pytest.mark.parametrize("nu", FREEDOM)
@pytest.mark.parametrize("p", [0.025, 0.5001, 0.6, 0.9, 0.95, 0.975, 0.995, 0.9995])
def test_t_quantile(p: float, nu: float) -> None:
    assert t_quantile(p, nu) == pytest.approx(float(stats.t.ppf(p, nu)), rel=1e-9, abs=1e-8)


@pytest.mark.parametrize("nu", [*FREEDOM, math.inf])
@pytest.mark.parametrize("t", [-3.0, -0.1, 0.0, 0.5, 2.0, 6.0])
def test_t_cdf(t: float, nu: float) -> None:
    assert t_cdf(t, nu) == pytest.approx(float(stats.t.cdf(t, nu)), rel=1e-10)


def test_t_quantile_without_end_is_the_normal_laws() -> None:
    assert t_quantile(0.975, math.inf) == pytest.approx(float(stats.norm.ppf(0.975)), rel=1e-9)


@pytest.mark.parametrize("f", [0.1, 0.5, 1.0, 2.0, 5.0, 20.0])
@pytest.mark.parametrize("above", [1, 2, 3, 10])
@pytest.mark.parametrize("below", [1, 3, 6, 100])
def test_f_tail(f: float, above: int, below: int) -> None:
    assert f_tail(f, above, below) == pytest.approx(float(stats.f.sf(f, above, below)), rel=1e-10)


def test_ends() -> None:
    assert incomplete_beta(2, 3, 0) == 0
    assert incomplete_beta(2, 3, 1) == 1
    assert f_tail(0.0, 2, 3) == 1

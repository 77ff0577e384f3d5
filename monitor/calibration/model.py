"""The model of a probe: period = t0 + exp(lnG - p x - q x^2), x = ln((k25 + b) f(T) / k0).

theta = (t0 us, lnG, p, q, b mS/cm). The circuit's own time t0, the polarisation exponent p and the
water's own salts b are known roughly beforehand; those priors make one to three standards enough
for an answer, and a wide one. `solve` fits many weighings of the same rows at once.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from monitor.blocks import Floats

N_THETA = 5
TURNS = 12
RENEWED = 6  # turns in which the variances follow the parameters
MAX_LN_STEP = 3.0  # of lnG a turn
WITHIN_SD = 6.0  # how far t0, p, q and b may go from their priors
FLOOR_SD = 1e-4  # of ln period: what no stated doubt goes below
MS_PER_PCT = 21.0  # d conductivity / d salinity, roughly: turns doubt of salinity into that of k
LEAST_SALTS_MS = 1e-4  # the water's own conductivity beside a standard of 0 %


USUAL_T0 = (0.05, 0.04)
LONG_T0 = (0.4, 0.2)  # a circuit whose own resistor is no smaller than the probe's


@dataclass(frozen=True)
class Prior:
    """What is known of theta beforehand: means (5,) and the inverse of its covariance (5, 5)."""

    mean: Floats
    weight: Floats

    @property
    def sd(self) -> Floats:
        """Standard deviations, those of the diagonal of the inverse."""
        return np.asarray(1 / np.sqrt(np.diag(self.weight)))


def first_prior(top_us: float, share: tuple[float, float] = USUAL_T0) -> Prior:
    """Prior for a new probe whose shortest standard period is `top_us`.

    `share`: mean and sd of t0 as a share of that period.
    """
    mean = np.array([share[0] * top_us, 0.0, 0.98, 0.0, 0.0015])
    sd = np.array([share[1] * top_us, 1e6, 0.015, 0.003, 0.001])
    return Prior(mean, np.diag(1 / sd**2))


class Rows(NamedTuple):
    """The standards as the fit takes them, (n,) each."""

    salinity_pct: Floats
    period_us: Floats
    k25_ms: Floats
    factor: Floats  # f(T)
    sensitivity: Floats  # f'/f
    temp_noise_c: Floats
    salinity_u_pct: Floats
    reading_var: Floats  # of ln period: w^2 + FLOOR_SD^2


class Fits(NamedTuple):
    """Fits under m weighings: theta (m, 5), a (m, 5, 5), residual, variance (m, n), q (m,)."""

    theta: Floats
    a: Floats
    residual: Floats  # ln(period / model), of the rows left out too
    variance: Floats  # of ln period
    q: Floats  # misfit: of the rows in use and of the priors
    slopes: Floats  # d ln period / d theta, (m, n, 5)


def evaluate(theta: Floats, rows: Rows, k0: float) -> tuple[Floats, Floats, Floats]:
    """Model period (m, n), its slopes d ln period / d theta (m, n, 5), and p + 2 q x (m, n)."""
    t0, ln_g, p, q, b = (theta[:, i, None] for i in range(N_THETA))
    k = rows.k25_ms + b
    x = np.log(k * rows.factor / k0)
    pulse = np.exp(np.clip(ln_g - p * x - q * x * x, -50.0, 50.0))
    period = np.maximum(t0 + pulse, 1e-12)
    share = pulse / period
    power = p + 2 * q * x
    slopes = np.stack((1 / period, share, -share * x, -share * x * x, -share * power / k), axis=-1)
    return period, slopes, power


def solve(rows: Rows, k0: float, use: Floats, tau_pct: Floats, prior: Prior) -> Fits:
    """Gauss-Newton fits, one a weighing.

    Parameters
    ----------
    use : (m, n) float64, 1 where the row is in use and 0 where it is left out
    tau_pct : (m,) float64, relative scatter of the standards' salinity assumed, in %
    """
    theta, low, high = _start(rows, k0, len(use), prior)
    variance = np.empty(use.shape)
    for turn in range(TURNS):
        period, slopes, power = evaluate(theta, rows, k0)
        if turn < RENEWED:
            variance = _variance(rows, slopes[..., 1] * power, tau_pct)
        residual = np.log(rows.period_us / period)
        a, pull = _normal(slopes, residual, use / variance, prior, theta)
        step = np.linalg.solve(a, pull[..., None])[..., 0]
        step[:, 1] = np.clip(step[:, 1], -MAX_LN_STEP, MAX_LN_STEP)
        moved = np.clip(theta + step, low, high)
        change = np.abs(moved - theta).max()
        theta = moved
        if turn >= RENEWED and change < 1e-8:
            break
    period, slopes, _ = evaluate(theta, rows, k0)
    residual = np.log(rows.period_us / period)
    a, _ = _normal(slopes, residual, use / variance, prior, theta)
    away = theta - prior.mean
    q = (use * residual**2 / variance).sum(1) + np.einsum("mi,ij,mj->m", away, prior.weight, away)
    return Fits(theta, a, residual, variance, q, slopes)


def _start(rows: Rows, k0: float, m: int, prior: Prior) -> tuple[Floats, Floats, Floats]:
    """Where the iteration begins, (m, 5), and the bounds it stays within."""
    mean = prior.mean.copy()
    low, high = mean - WITHIN_SD * prior.sd, mean + WITHIN_SD * prior.sd
    low[4] = max(low[4], LEAST_SALTS_MS - rows.k25_ms.min())
    x = np.log((rows.k25_ms + max(mean[4], low[4])) * rows.factor / k0)
    mean[1] = np.median(np.log(rows.period_us - mean[0]) + mean[2] * x)
    low[1], high[1] = -np.inf, np.inf
    return np.repeat(mean[None], m, axis=0), low, high


def _variance(rows: Rows, gain: Floats, tau_pct: Floats) -> Floats:
    """Variance of ln period (m, n); `gain` is -d ln period / d ln conductivity."""
    of_k = (rows.temp_noise_c * rows.sensitivity) ** 2
    of_k = of_k + (MS_PER_PCT * rows.salinity_u_pct / (rows.k25_ms + 0.0015)) ** 2
    return np.asarray(rows.reading_var + gain**2 * (of_k + (tau_pct[:, None] / 100) ** 2))


def _normal(
    slopes: Floats, residual: Floats, weight: Floats, prior: Prior, theta: Floats
) -> tuple[Floats, Floats]:
    """Matrix (m, 5, 5) and right side (m, 5) of the normal equations."""
    weighed = slopes * weight[..., None]
    a = np.einsum("mni,mnj->mij", weighed, slopes) + prior.weight
    pull = np.einsum("mni,mn->mi", weighed, residual) + (prior.mean - theta) @ prior.weight
    return a, pull

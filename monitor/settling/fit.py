"""One fit a dose: every model of the bank follows the readings, and is weighed by how well.

Each model is a recursive least-squares fit behind a scalar Kalman filter: the filter whitens the
turbulence (first-order autoregressive, fading as the model's tank mixes), the recursion keeps the
coefficients, their covariance and the weight up to date. A second costs two dozen NumPy calls.
No tank is one of the models: at every second it may go on as any other, with a small chance, so
that a model that explained the beginning best cannot hold on when the end is another's.

References
----------
Kalman, J. Basic Eng. 82 (1960) 35: the filter. Hoeting, Madigan, Raftery and Volinsky, Statist.
Sci. 14 (1999) 382: weighing models by their evidence. Herbster and Warmuth, Machine Learning 32
(1998) 151: the shared weight.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from monitor.blocks import Floats
from monitor.settling.models import SETTLE_S, TERMS, Bank, bank

FEWEST = 3  # readings before the first judgement
SWITCH = 0.01  # chance a second that the tank goes on as another of the models
LIGHT = 1e-3  # models of less weight are left out of a judgement
EDDIES = 0.375  # what a second's mean leaves of the variance of turbulence
STRAY_SD, STRAY_N = 6.0, 6  # off by so many standard deviations, after so many readings
STRAYS = 5  # in a row are believed again


class Innovation(NamedTuple):
    """A value against its prediction, for M models."""

    off: Floats  # (M,) value - prediction
    var: Floats  # (M,) of that
    cov_g: Floats  # (T, M) covariance of the coefficients with the prediction


@dataclass(frozen=True)
class Models:
    """What the weighty models say at one moment: the posterior as a mixture of normals."""

    bank: Bank
    x: float  # s, the moment
    weight: Floats  # (H,) sums to 1
    c: Floats  # (5, H)
    cov: Floats  # (5, 5, H)
    s2: float  # how much more scatter there is than was foreseen, at least 1

    def landing(self) -> tuple[float, float]:
        """Mean and standard deviation of c0."""
        mean = float(self.weight @ self.c[0])
        var = float(self.weight @ (self.cov[0, 0] + (self.c[0] - mean) ** 2))
        return mean, math.sqrt(max(var, 0.0))

    def remaining(self, x: Floats) -> Floats:
        """Mean of what is still to come at the times x (K, 1): (K, H)."""
        left: Floats = np.einsum("ikh,ih->kh", self.bank.shapes(x), self.c[1:])
        return left

    def observed(self, row: Floats, value: float, var: float) -> Models:
        """The same models after one more observation, row . c = value +- sqrt(var)."""
        gain = (self.cov * row).sum(axis=1)
        total = var + (row * gain).sum(axis=0)
        off = value - (row * self.c).sum(axis=0)
        ln_weight = np.log(self.weight) - 0.5 * (off * off / total + np.log(total))
        weight = np.exp(ln_weight - ln_weight.max())
        return Models(
            self.bank,
            self.x,
            weight / weight.sum(),
            self.c + gain * (off / total),
            self.cov - gain[:, None] * (gain / total)[None],
            self.s2,
        )


class LeastSquares:
    """Recursive least squares of M linear models at once, T terms each.

    Parameters
    ----------
    cov : (T, T, M), covariance of the coefficients before any reading; their means are 0
    """

    def __init__(self, cov: Floats) -> None:
        self.cov = np.ascontiguousarray(cov)
        self.c = np.zeros(cov.shape[1:])
        self.rss = np.zeros(cov.shape[2])  # squared errors of prediction, each by its variance

    def foresee(self, terms: Floats, value: Floats, var: Floats) -> Innovation:
        """How far the value (M,), of noise var (M,), is from what terms (T, M) predict."""
        cov_g = (self.cov * terms).sum(axis=1)
        total = var + (terms * cov_g).sum(axis=0)
        return Innovation(value - (terms * self.c).sum(axis=0), total, cov_g)

    def learn(self, seen: Innovation) -> Floats:
        """Take the value in; its squared error by the variance predicted, (M,)."""
        step = seen.cov_g / seen.var
        self.c += step * seen.off
        self.cov -= seen.cov_g[:, None] * step[None]
        error = seen.off * seen.off / seen.var
        self.rss += error
        return error


class Whitening:
    """Scalar Kalman filters that take the fading turbulence out of the readings and the terms.

    Parameters
    ----------
    var : (M,) %^2, of the turbulence when the dose has run in
    tau : (M,) s, with which it fades
    floor_var : %^2, of one second's mean in still water
    """

    def __init__(self, var: Floats, tau: Floats, floor_var: float) -> None:
        self.var, self.tau, self.floor_var = var, tau, floor_var
        self.fade = np.exp(-0.25 - 1.0 / tau)  # in a second: eddies live 4 s
        self.after = np.zeros(tau.size)  # variance of the turbulence after the last reading
        self.state = np.zeros((TERMS + 1, tau.size))  # of the value and the terms
        self.x = math.nan

    def innovations(self, x: float, rows: Floats) -> tuple[Floats, Floats, Floats]:
        """Rows (T + 1, M) without what the filters expected: with that, and the variance (M,)."""
        entry = self.var * np.exp(-2.0 * (x + SETTLE_S) / self.tau)
        if self.x != self.x:
            return rows, self.state, entry
        steps = x - self.x
        fade = self.fade if steps == 1.0 else self.fade**steps
        held = fade * self.state
        return rows - held, held, fade * fade * self.after + entry * -math.expm1(-0.5 * steps)

    def learn(self, x: float, white: Floats, held: Floats, before: Floats) -> None:
        """Take in what `innovations` gave."""
        gain = before / (before + self.floor_var)
        self.state = held + gain * white
        self.after = before * (1.0 - gain)
        self.x = x


class Fit:
    """Follow the salinity after a dose, relative to where it stood before.

    Parameters
    ----------
    open_s : s the dose ran in
    scale : % size of its step
    extra : % how far the tank was from rest when it began
    floor_var : %^2, variance of one second's mean in still water
    """

    def __init__(self, open_s: float, scale: float, extra: float, floor_var: float) -> None:
        self.bank = bank()
        self.floor_var = floor_var
        turbulence = EDDIES * (self.bank.level * (scale + extra)) ** 2
        self.whitening = Whitening(turbulence, self.bank.tau, floor_var)
        prior = np.linalg.inv(self.bank.prior(open_s, scale, extra)).astype(np.float64)
        self.squares = LeastSquares(np.moveaxis(prior, 0, -1))
        self.weight = self.bank.weight
        self.n = 0
        self.x = math.nan
        self.s2 = 1.0
        self.strays = 0

    def add(self, x: float, y: float) -> bool:
        """Take in the reading y (%) of the second whose middle is x; False if it is a stray one."""
        rows = np.empty((TERMS + 1, self.bank.tau.size))
        rows[0], rows[1] = y, 1.0
        rows[2:] = self.bank.shapes(np.array([[x]]))[:, 0]
        white, held, before = self.whitening.innovations(x, rows)
        seen = self.squares.foresee(white[1:], white[0], before + self.floor_var)
        if self._stray(seen):
            return False
        self.whitening.learn(x, white, held, before)
        error = self.squares.learn(seen)
        self._weigh(-0.5 * (error / self.s2 + np.log(seen.var)))
        self.n += 1
        self.x = x
        self.s2 = max(1.0, float(self.squares.rss.min()) / max(self.n - 3, 1))
        return True

    def models(self) -> Models:
        """What the models say now, the light ones left out."""
        which = np.flatnonzero(self.weight > LIGHT)
        weight = self.weight[which] / self.weight[which].sum()
        c, cov = self.squares.c[:, which], self.squares.cov[..., which] * self.s2
        return Models(self.bank.take(which), self.x, weight, c, cov, self.s2)

    def _weigh(self, ln_chance: Floats) -> None:
        weight = self.weight * np.exp(ln_chance - ln_chance.max())
        weight /= weight.sum()
        self.weight = (1.0 - SWITCH) * weight + SWITCH * self.bank.weight

    def _stray(self, seen: Innovation) -> bool:
        """Whether the reading is far outside of what the models expect; many in a row are not."""
        if self.n < STRAY_N:
            return False
        best = int(self.weight.argmax())
        far = seen.off[best] ** 2 > 9.0 * seen.var[best]
        if far:
            sds = np.abs(seen.off) / np.sqrt(self.s2 * seen.var)
            if float(self.weight @ sds) > STRAY_SD:
                self.strays += 1
                return self.strays <= STRAYS
        self.strays = 0
        return False

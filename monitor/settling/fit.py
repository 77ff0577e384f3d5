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

import numpy as np

from monitor.blocks import Floats
from monitor.settling.models import SETTLE_S, TERMS, Bank, bank

FEWEST = 3  # readings before the first judgement
SWITCH = 0.01  # chance a second that the tank goes on as another of the models
LIGHT = 9.0  # models whose ln weight is less than the best by this are left out of a judgement
STRAY_SD = 6.0
STRAYS = 5  # in a row are believed again


@dataclass(frozen=True)
class Models:
    """What the weighty models say at one moment: the posterior as a mixture of normals."""

    bank: Bank
    x: float  # s, the moment
    weight: Floats  # (H,) sums to 1
    c: Floats  # (5, H)
    cov: Floats  # (5, 5, H)
    s2: float  # how much more scatter there is than was foreseen, at least 1
    ln_evidence: float

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
        weight, ln_sum = _normalised(ln_weight)
        return Models(
            self.bank,
            self.x,
            weight,
            self.c + gain * (off / total),
            self.cov - gain[:, None] * (gain / total)[None],
            self.s2,
            self.ln_evidence + ln_sum - 0.5 * math.log(2 * math.pi),
        )


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
        self.turbulence = 0.375 * (self.bank.level * (scale + extra)) ** 2
        self.fade = np.exp(-0.25 - 1.0 / self.bank.tau)
        prior = np.linalg.inv(self.bank.prior(max(open_s, 0.5), scale, extra))
        self.cov = np.ascontiguousarray(np.moveaxis(prior, 0, -1))
        models = self.bank.tau.size
        self.c = np.zeros((TERMS, models))
        self.rss = np.zeros(models)  # squared errors of prediction, each by its variance
        self.prior = self.bank.prior_weight
        self.weight = self.prior
        self.carried = np.zeros((TERMS + 1, models))  # the filters' states: of y, 1, g1 to g4
        self.after = np.zeros(models)  # their variance after the last reading
        self.n = 0
        self.x = math.nan
        self.s2 = 1.0
        self.strays = 0

    def add(self, x: float, y: float) -> bool:
        """Take in the reading y (%) of the second whose middle is x; False if it is a stray one."""
        bank_ = self.bank
        entry = self.turbulence * np.exp(-2.0 * (x + SETTLE_S) / bank_.tau)
        row = np.empty_like(self.carried)
        row[0], row[1] = y, 1.0
        row[2:] = bank_.shapes(np.array([[x]]))[:, 0]
        if self.n:
            steps = x - self.x
            fade = self.fade if steps == 1.0 else self.fade**steps
            before = fade * fade * self.after + entry * (1.0 - math.exp(-0.5 * steps))
            held = fade * self.carried
            row -= held
        else:
            before, held = entry, self.carried
        white = before + self.floor_var
        g = row[1:]
        cov_g = (self.cov * g).sum(axis=1)
        total = white + (g * cov_g).sum(axis=0)
        off = row[0] - (g * self.c).sum(axis=0)
        if self._stray(off, total):
            return False
        gain = before / white
        self.carried = held + gain * row
        self.after = before * (1.0 - gain)
        step = cov_g / total
        self.c += step * off
        self.cov -= cov_g[:, None] * step[None]
        error = off * off / total
        self.rss += error
        ln_chance = -0.5 * (error / self.s2 + np.log(total / self.floor_var))
        weight = self.weight * np.exp(ln_chance - ln_chance.max())
        weight /= weight.sum()
        self.weight = (1.0 - SWITCH) * weight + SWITCH * self.prior
        self.n += 1
        self.x = x
        self.s2 = max(1.0, float(self.rss.min()) / max(self.n - 3, 1))
        return True

    def models(self) -> Models:
        """What the models say now, the light ones left out."""
        which = np.flatnonzero(self.weight > self.weight.max() * math.exp(-LIGHT))
        weight = self.weight[which] / self.weight[which].sum()
        cov = self.cov[..., which] * self.s2
        return Models(self.bank.take(which), self.x, weight, self.c[:, which], cov, self.s2, 0.0)

    def _stray(self, off: Floats, total: Floats) -> bool:
        """Whether the reading is far outside of what the models expect; many in a row are not."""
        if self.n < 6:
            return False
        best = int(self.weight.argmax())
        far = off[best] ** 2 > 9.0 * total[best]
        if far and float(self.weight @ (np.abs(off) / np.sqrt(self.s2 * total))) > STRAY_SD:
            self.strays += 1
            return self.strays <= STRAYS
        self.strays = 0
        return False


def _normalised(ln_weight: Floats) -> tuple[Floats, float]:
    """Weights that sum to 1, and the ln of what they summed to."""
    top = float(ln_weight.max())
    weight = np.exp(ln_weight - top)
    total = float(weight.sum())
    return weight / total, top + math.log(total)

"""The bank: small linear models of how a dosed tank comes to rest at the probe.

After the dose has run in, the salinity at the probe is `c0 + c1 g1(x) + ... + c4 g4(x)`, with x
the seconds since a few seconds after the dose's end. c0 is where it lands; the rest dies away.
The shapes g are fading exponentials of three kinds of tank, each with slow tails beside it:

single  one mixing time: e(tau)
loop    a circulation that passes the probe again and again: e(tau) cos, e(tau) sin
plume   a cloud that passes the probe before the tank is mixed: e(p), (x/p) e(p), e(tau)

Every array of a bank ends in the axis of the models, so that a bank thins by plain indexing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from monitor.blocks import Floats

SETTLE_S = 4.5  # x = 0 is this long after the dose has run in
DELAY_S = 3.4  # pipe, pump and electrodes answer about this late
LEVELS = (0.07, 0.2)  # turbulence at the dose's end, in steps of the dose
TERMS = 5  # c0 to c4
SINGLE, LOOP, PLUME = range(3)


@dataclass(frozen=True)
class Bank:
    """Shapes and prior weights of M models."""

    kind: NDArray[np.int64]  # (M,) SINGLE, LOOP or PLUME
    tau: Floats  # (M,) s
    rates: Floats  # (4, M) 1/s, of g1 to g4
    omega: Floats  # (M,) rad/s, of loops
    phase: Floats  # (M,) makes g2 of loops a sine, of plumes 1, of singles nothing
    flat: Floats  # (M,) g3 is (flat + slope x) exp(-rate x)
    slope: Floats  # (M,)
    ahead: Floats  # (6, M) s, the moments at which a model is asked whether it stays at rest
    level: Floats  # (M,) turbulence
    weight: Floats  # (M,) before any reading; sums to 1

    def take(self, which: NDArray[Any]) -> Bank:
        """The models `which` alone."""
        return Bank(*(getattr(self, field.name)[..., which] for field in fields(self)))

    def shapes(self, x: Floats) -> Floats:
        """g1 to g4 at the times x (K, 1) or (K, M), s: (4, K, M)."""
        g: Floats = np.exp(self.rates[:, None, :] * -x)
        turn = self.omega * x
        g[0] *= np.cos(turn)
        g[1] *= np.sin(turn + self.phase)
        g[2] *= self.flat + self.slope * x
        return g

    def prior(self, open_s: float, scale: float, extra: float) -> Floats:
        """Normal matrix (M, 5, 5) of what is known of c0 to c4 before any reading.

        Parameters
        ----------
        open_s : how long the dose ran in
        scale : size of its step, %
        extra : how far the tank was from rest when it began, %
        """
        left = 1.0 / self._left(open_s)
        sd_before = scale * (0.25 + 1.5 / self.tau) + extra
        loop, plume = self.kind == LOOP, self.kind == PLUME
        before = np.zeros((TERMS, self.tau.size))  # nothing had moved before the dose
        before[0], before[1], before[4] = 1.0, left[0].real, left[3].real
        before[2] = np.where(loop, -left[0].imag, 0.0)
        before[3] = np.where(plume, 0.0, left[2].real)
        turned = np.zeros_like(before)
        turned[1], turned[2] = np.where(loop, [left[0].imag, left[0].real], 0.0)
        matrix = _squared(before, sd_before) + _squared(turned, sd_before)
        matrix[:, 0, 0] += 1.0 / (3.0 * scale) ** 2
        matrix[:, 2, 2] += np.select([plume, loop], [1.0 / (1.2 * scale) ** 2, 0.0], 1.0)
        for column in (3, 4):  # slow tails are small, and on the side of the start
            tail = np.zeros_like(before)
            tail[0], tail[column] = 0.05, left[column - 1].real
            free = plume & (column == 3)
            matrix += _squared(np.where(free, 0.0, tail), 0.12 * scale + 0.5 * extra)
            matrix[free, column, column] += 1.0 / (1.2 * scale) ** 2
        return matrix

    def _left(self, open_s: float) -> NDArray[np.complex128]:
        """What a dose of open_s that began to act DELAY_S late leaves of each shape at x = 0."""
        q: NDArray[np.complex128] = self.rates.astype(np.complex128)
        q[0] += 1j * self.omega
        late = SETTLE_S - DELAY_S
        left: NDArray[np.complex128] = (
            np.exp(-late * q) * (1.0 - np.exp(-q * open_s)) / (q * open_s)
        )
        return left


def _squared(vector: Floats, sd: Floats | float) -> Floats:
    """The pseudo-observation vector . c = 0 +- sd as a normal matrix: (5, M) -> (M, 5, 5)."""
    scaled = (vector / sd).T
    return scaled[:, :, None] * scaled[:, None, :]


@cache
def bank() -> Bank:
    """The whole bank: 38 shapes at two levels of turbulence."""
    shapes = [*_singles(), *_loops(), *_plumes()]
    rows = [(*shape, level) for level in LEVELS for shape in shapes]
    kind, tau, rates, omega, phase, flat, slope, ahead, level = map(np.array, zip(*rows))
    count = np.bincount(kind)[kind]
    return Bank(
        kind, tau, rates.T.copy(), omega, phase, flat, slope, ahead.T.copy(), level,
        1.0 / (3.0 * count),
    )  # fmt: skip


# kind, tau, rates, omega, phase, flat, slope, ahead
_Row = tuple[int, float, tuple[float, ...], float, float, float, float, tuple[float, ...]]


def _singles() -> list[_Row]:
    rows: list[_Row] = []
    for tau in np.geomspace(3.0, 90.0, 14).tolist():
        rates = (1 / tau, 1 / tau, 0.4 / tau, 1 / (7 * tau))
        rows.append((SINGLE, tau, rates, 0.0, 0.0, 1.0, 0.0, _ahead(tau)))
    return rows


def _loops() -> list[_Row]:
    rows: list[_Row] = []
    for tau in np.geomspace(3.0, 75.0, 6).tolist():
        rates = (1 / tau, 1 / tau, 0.4 / tau, 1 / (7 * tau))
        for ratio in (0.7, 1.2, 2.0):
            turn = ratio * tau
            ahead = tuple(turn * part for part in (0.0, 0.125, 0.25, 0.4, 1.0, 3.0))
            rows.append((LOOP, tau, rates, 2 * math.pi / turn, 0.0, 1.0, 0.0, ahead))
    return rows


def _plumes() -> list[_Row]:
    rows: list[_Row] = []
    for tau in np.geomspace(3.0, 75.0, 6).tolist():
        p = tau / 4
        rates = (1 / tau, 1 / p, 1 / p, 0.2 / tau)
        rows.append((PLUME, tau, rates, 0.0, math.pi / 2, 0.0, 1 / p, _ahead(tau)))
    return rows


def _ahead(tau: float) -> tuple[float, ...]:
    return tuple(tau * part for part in (0.0, 0.4, 1.0, 2.0, 4.0, 8.0))

"""How poured liquid reaches the probe: the share still to come, x seconds after it went in.

Four kinds are those a bench mostly shows (stirred, loop, dead-zone, plume); the others are there
so that no judge can rely on having met them all. Every kind starts at 1 and fades to 0; between
them it may go below 0 (ringing, or a plume that passes the probe before it is mixed).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

GRID_S = 0.1  # of the simulated water; readings are interpolated between
WINDOW_S = 7200.0  # what is still to come after this is dropped
TURBULENCE_S = 2.0  # an eddy passes the probe in about this time


@dataclass(frozen=True)
class Mixing:
    """One way in which a tank mixes.

    kind : one of KINDS
    tau_s : its time constant
    delay_s : from the valve to the first sign at the probe
    turbulence : standard deviation of the eddies, share of the dose's step
    share : of the slow part, or height of the plume, 0 to 1
    slow : how many times slower that part is; of a plume, how many times faster
    beat : length of a loop's or an irregular stirrer's period, in tau_s
    """

    kind: str = "stirred"
    tau_s: float = 12.0
    delay_s: float = 3.0
    turbulence: float = 0.1
    share: float = 0.15
    slow: float = 4.0
    beat: float = 1.2

    def to_come(self, x_s: Floats) -> Floats:
        """Share of a parcel that the probe has not met, (n,) seconds >= 0 after it went in."""
        return KINDS[self.kind](x_s / self.tau_s, self)

    def response(self, open_s: float, rng: np.random.Generator) -> Floats:
        """Share of a dose's step that the probe shows, each GRID_S from the opening of the valve.

        A dose runs in evenly over `open_s`; the last entry is 1. Eddies are part of it, for they
        are water and not noise; they fade as the tank mixes.
        """
        t = np.arange(0.0, WINDOW_S + open_s, GRID_S)
        arrived = 1.0 - self.to_come(np.maximum(t - self.delay_s, 0.0))
        arrived[t <= self.delay_s] = 0.0
        n = max(1, round(open_s / GRID_S))
        total = np.concatenate(([0.0], np.cumsum(arrived)))
        begun = np.maximum(np.arange(t.size) + 1 - n, 0)
        mean = (total[1:] - total[begun]) / n
        mean += self.turbulence * _eddies(t - self.delay_s, open_s, self.tau_s, rng)
        unsettled = np.flatnonzero(np.abs(mean - 1.0) > 1e-4)
        mean = mean[: unsettled[-1] + 2 if unsettled.size else 1]
        mean[-1] = 1.0
        return mean


def _eddies(t: Floats, open_s: float, tau_s: float, rng: np.random.Generator) -> Floats:
    fade = np.clip(t / max(open_s, 1.0), 0.0, 1.0)
    fade *= np.exp(-np.maximum(t - max(open_s, 1.0), 0.0) / tau_s)
    white = rng.standard_normal(t.size)
    kernel = np.exp(-np.arange(0.0, 6 * TURBULENCE_S, GRID_S) / TURBULENCE_S)
    kernel /= np.sqrt(np.sum(kernel**2))
    return np.asarray(fade * np.convolve(white, kernel)[: t.size])


def _stirred(x: Floats, m: Mixing) -> Floats:
    return np.exp(-x)


def _loop(x: Floats, m: Mixing) -> Floats:
    return np.exp(-x) * np.cos(2 * np.pi * x / m.beat)


def _dead_zone(x: Floats, m: Mixing) -> Floats:
    return (1 - m.share) * np.exp(-x) + m.share * np.exp(-x / m.slow)


def _passing(x: Floats, m: Mixing) -> Floats:
    return m.share * m.slow * x * np.exp(1 - m.slow * x)


def _plume(x: Floats, m: Mixing) -> Floats:
    return np.exp(-x) - 2 * _passing(x, m)


def _zones(x: Floats, m: Mixing) -> Floats:
    return np.asarray((m.slow * np.exp(-x / m.slow) - np.exp(-x)) / (m.slow - 1))


def _parcel(x: Floats, m: Mixing) -> Floats:
    late = (1 - np.tanh(2 * (x - m.slow))) / 2
    return np.asarray((1 - m.share) * np.exp(-x) + m.share * late)


def _power(x: Floats, m: Mixing) -> Floats:
    return np.asarray((1 + x / m.slow) ** -m.slow)


def _creep(x: Floats, m: Mixing) -> Floats:
    return np.exp(-(x**0.65))


def _cascade(x: Floats, m: Mixing) -> Floats:
    y = 2 * x
    return np.exp(-y) * (1 + y + y**2 / 2)


def _slow_loop(x: Floats, m: Mixing) -> Floats:
    return (1 - m.share) * _loop(x, m) + m.share * np.exp(-x / m.slow)


def _slow_plume(x: Floats, m: Mixing) -> Floats:
    return _dead_zone(x, m) - 2 * _passing(x, m)


def _irregular(x: Floats, m: Mixing) -> Floats:
    angle = 2 * np.pi * x / m.beat + 2 * np.pi * m.share
    waves = np.cos(2 * np.pi * m.share) - np.cos(angle)
    return np.asarray(np.exp(-x - 0.9 * m.beat / (2 * np.pi) * waves))


KINDS: dict[str, Callable[[Floats, Mixing], Floats]] = {
    "stirred": _stirred,
    "loop": _loop,
    "dead-zone": _dead_zone,
    "plume": _plume,
    "zones": _zones,  # two in series
    "parcel": _parcel,  # a share that comes late, all at once
    "power": _power,  # a tail of many sizes of corner
    "creep": _creep,  # stretched
    "cascade": _cascade,  # three in series: nothing at first
    "slow-loop": _slow_loop,
    "slow-plume": _slow_plume,
    "irregular": _irregular,  # a stirrer that labours
}
USUAL = ("stirred", "loop", "dead-zone", "plume")
FOREIGN = tuple(kind for kind in KINDS if kind not in USUAL)

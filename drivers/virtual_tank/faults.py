"""Everything that goes wrong with a probe, as a change of its periods between two times.

`apply` works before the microcontroller's clock counts, `hold` after it. NaN = nothing is sent,
0 = no pulse was seen. A fault draws what is random in it when it is made, so that readings do not
depend on how a run was cut.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from drivers.virtual_tank.mixing import Floats

LONGEST_S = 6 * 3600.0  # random events are drawn for at most this long


@dataclass
class Fault:
    """One fault. `to_s` may be moved while it lasts; `figures` say how bad it is."""

    name: str
    from_s: float
    to_s: float
    figures: dict[str, Any] = field(default_factory=dict)
    events: tuple[Floats, Floats, Floats] | None = None  # from, to, factor
    held: float | None = None

    def apply(self, time_s: Floats, period_us: Floats, t0_us: float) -> Floats:
        """Periods as this fault leaves them, (n,) us; the argument is not changed."""
        change = _CHANGES.get(self.name)
        first, stop = np.searchsorted(time_s, (self.from_s, self.to_s))
        if change is None or first == stop:
            return period_us
        changed = period_us.copy()
        changed[first:stop] = change(self, time_s[first:stop], period_us[first:stop], t0_us)
        return changed

    def hold(self, time_s: Floats, period_us: Floats) -> Floats:
        """A counter that hangs says the figure it had."""
        first, stop = np.searchsorted(time_s, (self.from_s, self.to_s))
        if self.name != "stuck" or first == stop:
            return period_us
        if self.held is None:
            self.held = float(period_us[first])
        changed = period_us.copy()
        changed[first:stop] = self.held
        return changed


def make(name: str, from_s: float, to_s: float, rng: np.random.Generator, **given: Any) -> Fault:
    """A fault of `name`, its figures drawn where they are not given.

    `least_s` is the shortest that a bubble or a let-go lasts: the time between two readings,
    where each of them shall be met.

    Raises
    ------
    ValueError
        If there is no such fault.
    """
    if name not in NAMES:
        raise ValueError(f"no fault {name[:40]!r}; one of {', '.join(NAMES)}")
    least_s = given.pop("least_s", 0.0)
    figures = {**(_DRAWS[name](rng) if name in _DRAWS else {}), **given}
    fault = Fault(name, from_s, to_s, figures)
    if "rate_hz" in figures:
        fault.events = _events(fault, least_s, rng)
    return fault


def _events(
    fault: Fault, least_s: float, rng: np.random.Generator
) -> tuple[Floats, Floats, Floats]:
    """Times and factors of bubbles, or of a lead that lets go; the first at once."""
    lasts = min(fault.to_s - fault.from_s, LONGEST_S)
    n = max(1, int(rng.poisson(lasts * fault.figures["rate_hz"])))
    start = fault.from_s + np.sort(rng.uniform(0.0, lasts, n))
    start[0] = fault.from_s + min(2.0, start[0] - fault.from_s)
    stop = start + np.maximum(rng.exponential(fault.figures["width_s"], n), least_s)
    if fault.name == "bubbles":
        return start, stop, 1 + fault.figures["height"] * rng.uniform(0.35, 2.2, n)
    up = np.exp(rng.uniform(math.log(4.0), math.log(60.0), n))
    down = rng.uniform(0.3, 0.6, n)
    return start, stop, np.where(rng.random(n) < 0.6, up, down)


def _event_factors(fault: Fault, t: Floats, period: Floats, t0_us: float) -> Floats:
    assert fault.events is not None
    changed = period.copy()
    for start, stop, factor in zip(*fault.events):
        if start <= t[-1] and stop >= t[0]:
            first, last = np.searchsorted(t, (start, stop))
            changed[first:last] *= factor
    return changed


def _lodged(fault: Fault, t: Floats, period: Floats, t0_us: float) -> Floats:
    up = np.clip((t - fault.from_s) / max(fault.figures["rise_s"], 1e-3), 0.0, 1.0)
    return np.asarray(period * (1 + fault.figures["height"] * up))


def _fouling(fault: Fault, t: Floats, period: Floats, t0_us: float) -> Floats:
    grown = 1 + fault.figures["rate_per_h"] * (t - fault.from_s) / 3600.0
    return np.asarray(t0_us + (period - t0_us) * grown)


def _hum(fault: Fault, t: Floats, period: Floats, t0_us: float) -> Floats:
    angle = 2 * np.pi * fault.figures["alias_hz"] * (t - fault.from_s)
    return np.asarray(period * (1 + fault.figures["depth"] * np.sin(angle)))


def _no_pulses(fault: Fault, t: Floats, period: Floats, t0_us: float) -> Floats:
    return np.full(t.size, np.nan if fault.figures["style"] == "silent" else 0.0)


def _short(fault: Fault, t: Floats, period: Floats, t0_us: float) -> Floats:
    # what stands behind the point of a noisy period is as good as noise
    return np.asarray(1.02 * max(t0_us, 1.0) + np.mod(period, 1.0) - 0.5)


def _lift(fault: Fault, t: Floats, period: Floats, t0_us: float) -> Floats:
    """Out of the water: no pulse in air, then a long period while it stands in the rinse."""
    part = (t - fault.from_s) / (fault.to_s - fault.from_s)
    return np.where(part < fault.figures["in_air"], 0.0, period * fault.figures["rinse"])


_CHANGES: dict[str, Callable[[Fault, Floats, Floats, float], Floats]] = {
    "bubbles": _event_factors,
    "loose-lead": _event_factors,
    "lodged-bubble": _lodged,
    "fouling": _fouling,
    "hum": _hum,
    "no-pulses": _no_pulses,
    "short": _short,
    "lift": _lift,
}
NAMES = (*_CHANGES, "stuck")

_DRAWS: dict[str, Callable[[np.random.Generator], dict[str, Any]]] = {
    "bubbles": lambda rng: {
        "rate_hz": rng.uniform(0.12, 0.45),
        "width_s": rng.uniform(0.35, 1.5),
        "height": rng.uniform(0.05, 0.28),
    },
    "loose-lead": lambda rng: {
        "rate_hz": rng.uniform(0.35, 1.0),
        "width_s": rng.uniform(0.04, 0.5),
    },
    "lodged-bubble": lambda rng: {
        "height": rng.uniform(0.07, 0.4),
        "rise_s": rng.uniform(0.2, 2.9),
    },
    "fouling": lambda rng: {"rate_per_h": rng.uniform(0.015, 0.05)},
    "hum": lambda rng: {"depth": rng.uniform(0.009, 0.035), "alias_hz": rng.uniform(0.05, 0.9)},
    "no-pulses": lambda rng: {"style": str(rng.choice(["silent", "zeros"]))},
    "lift": lambda rng: {"in_air": rng.uniform(0.15, 0.6), "rinse": rng.uniform(12.0, 35.0)},
}

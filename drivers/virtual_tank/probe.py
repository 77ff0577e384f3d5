"""A virtual probe: water to pulse period, with the noise of a cheap circuit and its clock.

The period of a two-electrode probe at a 555 timer is t0 + g / conductance^p: t0 the circuit's own
time, g the cell and the capacitor, p a little below 1 because electrodes polarise.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from drivers.virtual_tank import noise
from drivers.virtual_tank.faults import Fault
from drivers.virtual_tank.mixing import Floats
from drivers.virtual_tank.tank import Tank
from monitor.water import Medium, medium

JITTER = 0.016  # standard deviation of a reading's time, share of the time between readings


class Readings(NamedTuple):
    """What a probe said: times, periods (0 = no pulse), temperatures (NaN without thermometer)."""

    time_s: Floats
    period_us: Floats
    temp_c: Floats


@dataclass(frozen=True)
class Circuit:
    """Constants of a probe: t0_us, g (us at 1 mS/cm), p, and the water's own salts in mS/cm.

    The laws of the water are those of its medium; what a bench can get wrong about them is in p,
    in the background and in the standards' own errors.
    """

    t0_us: float = 12.0
    g: float = 900.0
    p: float = 0.985
    background_ms_cm: float = 0.0015
    water: Medium = medium("NaCl")  # noqa: RUF009 - frozen

    def period_us(self, salinity_pct: Floats, temp_c: Floats) -> Floats:
        """Noise-free period, (n,) us."""
        at_25 = self.water.conductivity_25_ms(salinity_pct) + self.background_ms_cm
        return np.asarray(self.t0_us + self.g * (at_25 * self.water.factor(temp_c)) ** -self.p)


@dataclass
class Climate:
    """Temperature of the water: a base, a thermostat's swing, a ramp, and slow wandering."""

    base_c: float = 25.0
    swing_c: float = 0.0
    swing_s: float = 1200.0
    ramp_c_per_h: float = 0.0
    wander_c: float = 0.05
    wave: Floats | None = None

    def temp_c(self, time_s: Floats) -> Floats:
        """Of the water at the probe, (n,) C."""
        level = self.base_c + self.ramp_c_per_h * time_s / 3600.0
        level = level + self.swing_c * np.sin(2 * np.pi * time_s / self.swing_s)
        return level if self.wave is None else level + self.wander_c * noise.at(self.wave, time_s)


@dataclass
class Probe:
    """A probe in a tank. White and flicker noise are relative, `tick_us` is its clock's."""

    tank: Tank
    climate: Climate
    rng: np.random.Generator
    circuit: Circuit = field(default_factory=Circuit)
    white: float = 0.002
    flicker: float = 0.0003
    tick_us: float = 1.0
    rate_hz: float = 5.0
    thermometer_c: float | None = 0.03
    faults: list[Fault] = field(default_factory=list)

    def __post_init__(self) -> None:
        self._flicker = noise.pink(self.rng)

    def read(self, first: int, stop: int) -> Readings:
        """Readings number `first` up to `stop`; a probe that is silent gives fewer."""
        n = stop - first
        jitter = np.clip(self.rng.normal(0.0, JITTER, n), -0.2, 0.2)
        time_s = np.maximum(np.arange(first, stop) + jitter, 0.0) / self.rate_hz
        water_c = self.climate.temp_c(time_s)
        period = self.circuit.period_us(self.tank.salinity_pct(time_s), water_c)
        period *= np.exp(
            self.white * self.rng.standard_normal(n)
            + self.flicker * noise.at(self._flicker, time_s)
        )
        for fault in self.faults:
            period = fault.apply(time_s, period, self.circuit.t0_us)
        period = np.rint(period / self.tick_us) * self.tick_us
        for fault in self.faults:
            period = fault.hold(time_s, period)
        temp = np.full(n, np.nan)
        if self.thermometer_c is not None:
            temp = np.round(water_c + self.thermometer_c * self.rng.standard_normal(n), 2)
        heard = ~np.isnan(period)
        return Readings(time_s[heard], period[heard], temp[heard])

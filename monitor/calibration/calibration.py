"""A calibration in force: period and temperature to salinity, in closed form, with its doubt.

Whatever the fit weighed is in one parameter vector and one covariance matrix. A value's doubt and
a step's come out of that pair, so what two values have in common cancels in their difference.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, fields
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np

from monitor.blocks import NAN, Floats
from monitor.water import Medium, OutOfRangeError, medium

LAW_PER_C = 6e-5  # relative doubt of the temperature law a degree from the standards'
THERMOMETER_U_C = 0.1  # standard uncertainty of a thermometer's offset, where none is stated
UNKNOWN_TEMP_U_C = 1.0  # and of a temperature that nobody measured
SLOW_NOISE = 3e-4  # relative noise of period that does not average out
K_95 = 2.0  # u95 / u: the doubt about the scatter is in u already
_FLOATS = ("k0_ms", "temp_c", "lowest_pct", "highest_pct", "top_us", "jitter", "tick_us")
SHORTEST = 1.05  # periods under this many t0 hold no salinity


class CalibrationError(ValueError):
    """The standards allow no calibration. `str()` is the one line to show."""


class Slopes(NamedTuple):
    """How a salinity hangs on what it was computed from, at one period and temperature."""

    theta: tuple[float, float, float, float, float]  # dS / d theta
    z: float  # dS / d ln(k + b)
    of_ln_p: float  # dS / d ln period
    sensitivity: float  # f'/f of the medium, per degree


@dataclass(frozen=True)
class Parts:
    """What the standard doubt of one salinity is made of, % by mass each."""

    calibration: float
    law: float
    thermometer: float
    noise: float = 0.0
    slow_noise: float = 0.0
    tick: float = 0.0
    temperature: float = 0.0  # not known, or known with noise

    @property
    def u_pct(self) -> float:
        """All of them together."""
        return math.sqrt(sum(part**2 for part in vars(self).values()))


@dataclass(frozen=True)
class Calibration:
    """What the standards say, whole. Made by `fit`, or from a log by `from_event`."""

    name: str
    medium: str
    theta: tuple[float, ...]  # t0 us, lnG, p, q, b mS/cm
    cov: tuple[tuple[float, ...], ...]  # (5, 5)
    k0_ms: float
    temp_c: float  # mean temperature of the standards
    temp_known: bool  # False: nobody measured it
    lowest_pct: float  # span of the standards above 0
    highest_pct: float
    top_us: float  # their shortest period
    jitter: float  # noise of a single reading, relative
    dof: float  # effective degrees of freedom of u, in the middle of the span
    tick_us: float
    scatter: tuple[float, ...]  # how likely each size of the standards' scatter is
    remarks: tuple[str, ...]  # one line each, for a person
    date: str | None
    standards: tuple[Mapping[str, Any], ...]

    @cached_property
    def law(self) -> Medium:
        """The laws of its medium."""
        return medium(self.medium)

    def salinity_pct(self, period_us: Floats, temp_c: Floats) -> Floats:
        """Salinity in % by mass; the same bits for any number of values.

        Parameters
        ----------
        period_us, temp_c : (n,) float64, us and Celsius

        Returns
        -------
        (n,) float64; NaN where either is NaN, where the period is next to the circuit's own time,
        and where the conductivity is beyond the medium's law
        """
        k = self.conductivity_25_ms(period_us, temp_c)
        with np.errstate(invalid="ignore"):
            salinity = self.law.salinity_pct(np.maximum(k, 0.0))
            return np.where(k <= self.law.limit_ms, salinity, NAN)

    def conductivity_25_ms(self, period_us: Floats, temp_c: Floats) -> Floats:
        """Conductivity of the salt alone at 25 C, (n,) mS/cm; NaN as in `salinity_pct`."""
        t0, ln_g, p, q, b = self.theta
        period = np.ascontiguousarray(period_us, dtype=np.float64)
        temp = np.ascontiguousarray(temp_c, dtype=np.float64)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            y = ln_g - np.log(np.where(period > max(SHORTEST * t0, 0.0), period - t0, NAN))
            x = 2 * y / (p + np.sqrt(p * p + 4 * q * y))
            return np.asarray(self.k0_ms * np.exp(x) / self.law.factor(temp) - b)

    def u_pct(
        self,
        period_us: float,
        temp_c: float,
        temp_u_c: float = THERMOMETER_U_C,
        temp_noise_c: float = 0.0,
    ) -> float:
        """Standard uncertainty of the conversion, % by mass; no reading noise. NaN where no value.

        `temp_u_c` is the thermometer's offset, which cancels as far as it also read the
        standards; `temp_noise_c` what the temperature may be off besides.
        """
        slopes = self.slopes(period_us, temp_c)
        if slopes is None:
            return NAN
        law = LAW_PER_C * (temp_c - self.temp_c)
        thermometer = temp_u_c * (slopes.sensitivity - self._sensitivity)
        temperature = slopes.sensitivity * self._unknown_c(temp_noise_c)
        relative = law**2 + thermometer**2 + temperature**2
        return math.sqrt(self._variance(slopes.theta) + slopes.z**2 * relative)

    def parts(
        self,
        period_us: float,
        temp_c: float,
        temp_u_c: float = THERMOMETER_U_C,
        temp_noise_c: float = 0.0,
        readings: int = 0,
    ) -> Parts:
        """The budget of one salinity. `readings`: how many the period is a mean of, 0 = given."""
        slopes = self.slopes(period_us, temp_c)
        if slopes is None:
            return Parts(NAN, NAN, NAN)
        z, of_ln_p = abs(slopes.z), abs(slopes.of_ln_p)
        tick = self.tick_us / (12**0.5 * period_us)
        return Parts(
            calibration=math.sqrt(self._variance(slopes.theta)),
            law=z * abs(LAW_PER_C * (temp_c - self.temp_c)),
            thermometer=z * abs(temp_u_c * (slopes.sensitivity - self._sensitivity)),
            noise=of_ln_p * self.jitter / math.sqrt(readings) if readings else 0.0,
            slow_noise=of_ln_p * SLOW_NOISE if readings else 0.0,
            tick=of_ln_p * tick if readings == 1 else 0.0,
            temperature=z * slopes.sensitivity * self._unknown_c(temp_noise_c),
        )

    def u_step_pct(
        self,
        from_us: float,
        from_c: float,
        to_us: float,
        to_c: float,
        temp_u_c: float = THERMOMETER_U_C,
    ) -> float:
        """Standard uncertainty of salinity(to) - salinity(from), % by mass; no reading noise.

        What both have in common, the calibration's error above all, cancels.
        """
        a, b = self.slopes(from_us, from_c), self.slopes(to_us, to_c)
        if a is None or b is None:
            return NAN
        a0, a1, a2, a3, a4 = a.theta
        b0, b1, b2, b3, b4 = b.theta
        var = self._variance((b0 - a0, b1 - a1, b2 - a2, b3 - a3, b4 - a4))
        law = LAW_PER_C * (b.z * (to_c - self.temp_c) - a.z * (from_c - self.temp_c))
        off = b.z * (b.sensitivity - self._sensitivity) - a.z * (a.sensitivity - self._sensitivity)
        unknown = self._unknown_c(0.0) * (b.z * b.sensitivity - a.z * a.sensitivity)
        return math.sqrt(var + law**2 + (temp_u_c * off) ** 2 + unknown**2)

    def period_us(self, salinity_pct: float, temp_c: float) -> float:
        """The period that this salinity lets expect, us."""
        t0, ln_g, p, q, b = self.theta
        k = float(self.law.conductivity_25_ms(np.array([salinity_pct]))[0])
        x = math.log(max(k + b, 1e-9) * self.law.sensitivity(temp_c)[0] / self.k0_ms)
        return t0 + math.exp(ln_g - p * x - q * x * x)

    def inside(self, salinity_pct: float, u95_pct: float) -> bool:
        """Whether a salinity is in the span of the standards above 0, but for its doubt."""
        return (
            self.lowest_pct - u95_pct <= salinity_pct <= self.highest_pct + u95_pct
            and self.lowest_pct > 0
        )

    def as_event(self) -> dict[str, Any]:
        """The fields of a `calibration` event; JSON keeps every bit of them."""
        event = {field.name: getattr(self, field.name) for field in fields(self)}
        event["dof"] = self.dof if math.isfinite(self.dof) else None
        event["theta"] = list(self.theta)
        event["cov"] = [list(row) for row in self.cov]
        event["scatter"] = list(self.scatter)
        event["remarks"] = list(self.remarks)
        event["standards"] = [dict(standard) for standard in self.standards]
        return event

    @classmethod
    def from_event(cls, event: Mapping[str, Any]) -> Calibration:
        """The calibration that such an event holds. Raises CalibrationError."""
        names = [field.name for field in fields(cls)]
        missing = [name for name in names if name not in event]
        if missing:
            raise CalibrationError(f"calibration event: {missing[0]} missing")
        read: dict[str, Any] = {name: event[name] for name in names}
        try:
            read.update({name: float(event[name]) for name in _FLOATS})
            read["dof"] = math.inf if event["dof"] is None else float(event["dof"])
            read["theta"] = tuple(float(value) for value in event["theta"])
            read["cov"] = tuple(tuple(float(v) for v in row) for row in event["cov"])
            read["scatter"] = tuple(float(value) for value in event["scatter"])
            read["remarks"] = tuple(str(line) for line in event["remarks"])
            read["standards"] = tuple(dict(standard) for standard in event["standards"])
            made = cls(**read)
            medium(made.medium)
        except (TypeError, ValueError, OutOfRangeError) as wrong:
            raise CalibrationError(f"calibration event: {wrong}") from None
        figures = [*made.theta, *(value for row in made.cov for value in row)]
        if len(made.theta) != 5 or len(figures) != 30 or not all(map(math.isfinite, figures)):
            raise CalibrationError("calibration event: expected 5 parameters, 5 x 5 covariances")
        return made

    @cached_property
    def _sensitivity(self) -> float:
        """f'/f at the standards' temperature."""
        return self.law.sensitivity(self.temp_c)[1]

    def _unknown_c(self, temp_noise_c: float) -> float:
        return temp_noise_c if self.temp_known else math.hypot(temp_noise_c, UNKNOWN_TEMP_U_C)

    def slopes(self, period_us: float, temp_c: float) -> Slopes | None:
        """How the salinity hangs on its parts; None where the period holds no salinity."""
        t0, ln_g, p, q, b = self.theta
        pulse = period_us - t0
        if not period_us > max(SHORTEST * t0, 0.0) or not math.isfinite(period_us + temp_c):
            return None
        y = ln_g - math.log(pulse)
        root = p * p + 4 * q * y
        if root <= 0:
            return None
        x = 2 * y / (p + math.sqrt(root))
        factor, sensitivity = self.law.sensitivity(temp_c)
        k_b = self.k0_ms * math.exp(x) / factor
        k = k_b - b
        if k > self.law.limit_ms:
            return None
        of_k = self.law.slope(max(k, 0.0))
        z = of_k * k_b
        m = p + 2 * q * x
        theta = (z / (m * pulse), z / m, -z * x / m, -z * x * x / m, -of_k)
        return Slopes(theta, z, -z * period_us / (m * pulse), sensitivity)

    def _variance(self, d: tuple[float, float, float, float, float]) -> float:
        """d' C d, at least 0."""
        d0, d1, d2, d3, d4 = d
        total = 0.0
        for di, (c0, c1, c2, c3, c4) in zip(d, self.cov):
            total += di * (c0 * d0 + c1 * d1 + c2 * d2 + c3 * d3 + c4 * d4)
        return total if total > 0 else 0.0

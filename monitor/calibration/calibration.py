"""A calibration in force: period and temperature to salinity, in closed form, with its doubt.

Whatever the fit weighed is in one parameter vector and one covariance matrix. A value's doubt and
a step's come out of that pair, so what two values have in common cancels in their difference.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from monitor.blocks import NAN, Floats
from monitor.water import Medium, OutOfRangeError, medium

LAW_PER_C = 6e-5  # relative doubt of the temperature law a degree from the standards'
THERMOMETER_U_C = 0.1  # standard uncertainty of a thermometer's offset, where none is stated
UNKNOWN_TEMP_U_C = 1.0  # and of a temperature that nobody measured
SLOW_NOISE = 3e-4  # relative noise of period that does not average out
K_95 = 2.0  # u95 / u: the doubt about the scatter is in u already
SHORTEST = 1.05  # periods under this many t0 hold no salinity


_Slopes = tuple[tuple[float, ...], float, float]


class CalibrationError(ValueError):
    """The standards allow no calibration. `str()` is the one line to show."""


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
        return self.parts(period_us, temp_c, temp_u_c, temp_noise_c).u_pct

    def parts(
        self,
        period_us: float,
        temp_c: float,
        temp_u_c: float = THERMOMETER_U_C,
        temp_noise_c: float = 0.0,
        readings: int = 0,
    ) -> Parts:
        """The budget of one salinity. `readings`: how many the period is a mean of, 0 = given."""
        slopes = self._slopes(period_us, temp_c)
        if slopes is None:
            return Parts(NAN, NAN, NAN)
        d, z, of_ln_p = slopes
        a, a_standards = self._sensitivity(temp_c), self._sensitivity(self.temp_c)
        off = temp_noise_c if self.temp_known else math.hypot(temp_noise_c, UNKNOWN_TEMP_U_C)
        return Parts(
            calibration=math.sqrt(self._variance(d)),
            law=abs(z * LAW_PER_C * (temp_c - self.temp_c)),
            thermometer=abs(z * temp_u_c * (a - a_standards)),
            noise=abs(of_ln_p) * self.jitter / math.sqrt(readings) if readings else 0.0,
            slow_noise=abs(of_ln_p) * SLOW_NOISE if readings else 0.0,
            tick=abs(of_ln_p) * self.tick_us / (12**0.5 * period_us) if readings == 1 else 0.0,
            temperature=abs(z * a * off),
        )

    def u_step_pct(
        self,
        from_us: float,
        from_c: float,
        to_us: float,
        to_c: float,
        temp_u_c: float = THERMOMETER_U_C,
    ) -> float:
        """Standard uncertainty of salinity(to) - salinity(from), % by mass; no reading noise."""
        first, second = self._slopes(from_us, from_c), self._slopes(to_us, to_c)
        if first is None or second is None:
            return NAN
        d = tuple(second[0][i] - first[0][i] for i in range(5))
        law = LAW_PER_C * (second[1] * (to_c - self.temp_c) - first[1] * (from_c - self.temp_c))
        a_standards = self._sensitivity(self.temp_c)
        offset = temp_u_c if self.temp_known else math.hypot(temp_u_c, UNKNOWN_TEMP_U_C)
        thermometer = offset * (
            second[1] * (self._sensitivity(to_c) - a_standards)
            - first[1] * (self._sensitivity(from_c) - a_standards)
        )
        return math.sqrt(self._variance(d) + law**2 + thermometer**2)

    def inside(self, salinity_pct: float, u95_pct: float) -> bool:
        """Whether a salinity is in the span of the standards above 0, but for its doubt."""
        return (
            self.lowest_pct - u95_pct <= salinity_pct <= self.highest_pct + u95_pct
            and self.lowest_pct > 0
        )

    def as_event(self) -> dict[str, Any]:
        """The fields of a `calibration` event; JSON keeps every bit of them."""
        fields = dict(vars(self))
        fields.pop("law", None)
        fields["theta"] = list(self.theta)
        fields["cov"] = [list(row) for row in self.cov]
        fields["scatter"] = list(self.scatter)
        fields["remarks"] = list(self.remarks)
        fields["standards"] = [dict(standard) for standard in self.standards]
        return fields

    @classmethod
    def from_event(cls, fields: Mapping[str, Any]) -> Calibration:
        """The calibration that such an event holds. Raises CalibrationError."""
        try:
            made = cls(
                name=str(fields["name"]),
                medium=str(fields["medium"]),
                theta=tuple(float(value) for value in fields["theta"]),
                cov=tuple(tuple(float(value) for value in row) for row in fields["cov"]),
                k0_ms=float(fields["k0_ms"]),
                temp_c=float(fields["temp_c"]),
                temp_known=bool(fields["temp_known"]),
                lowest_pct=float(fields["lowest_pct"]),
                highest_pct=float(fields["highest_pct"]),
                top_us=float(fields["top_us"]),
                jitter=float(fields["jitter"]),
                tick_us=float(fields["tick_us"]),
                scatter=tuple(float(value) for value in fields["scatter"]),
                remarks=tuple(str(line) for line in fields["remarks"]),
                date=fields["date"],
                standards=tuple(dict(standard) for standard in fields["standards"]),
            )
            medium(made.medium)
        except KeyError as wrong:
            raise CalibrationError(f"calibration event: {wrong.args[0]} missing") from None
        except (TypeError, ValueError, OutOfRangeError) as wrong:
            raise CalibrationError(f"calibration event: {wrong}") from None
        figures = [*made.theta, *(value for row in made.cov for value in row), made.k0_ms]
        if len(figures) != 31 or not all(map(math.isfinite, figures)):
            raise CalibrationError("calibration event: expected 5 parameters and 5 x 5 covariances")
        return made

    def _sensitivity(self, temp_c: float) -> float:
        return self.law.sensitivity(temp_c)[1]

    def _slopes(self, period_us: float, temp_c: float) -> _Slopes | None:
        """dS/dtheta, (dS/dk)(k + b) and dS/dlnP at one period; None where it holds no salinity."""
        t0, ln_g, p, q, b = self.theta
        pulse = period_us - t0
        if not period_us > max(SHORTEST * t0, 0.0) or not math.isfinite(period_us + temp_c):
            return None
        y = ln_g - math.log(pulse)
        root = p * p + 4 * q * y
        if root <= 0:
            return None
        x = 2 * y / (p + math.sqrt(root))
        k_b = self.k0_ms * math.exp(x) / self.law.sensitivity(temp_c)[0]
        k = k_b - b
        if k > self.law.limit_ms:
            return None
        of_k = self.law.slope(max(k, 0.0))
        z = of_k * k_b
        m = p + 2 * q * x
        d = (z / (m * pulse), z / m, -z * x / m, -z * x * x / m, -of_k)
        return d, z, -z * period_us / (m * pulse)

    def _variance(self, d: tuple[float, ...]) -> float:
        """d' C d, at least 0."""
        d0, d1, d2, d3, d4 = d
        total = 0.0
        for di, (c0, c1, c2, c3, c4) in zip(d, self.cov):
            total += di * (c0 * d0 + c1 * d1 + c2 * d2 + c3 * d3 + c4 * d4)
        return total if total > 0 else 0.0

"""`hum`: a steady oscillation of the period, from 0.04 Hz to 1 Hz or half the reading rate.

Means of up to half a second, 80 s of them, transformed every five seconds. A thermostat is slower,
ringing after a dose fades (the quarters differ), mixing has no phase. In white noise a line 40
times its neighbours comes about once in 10,000 h.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from monitor.blocks import Floats, Second

SPAN_S, EVERY_S = 80.0, 5
BAND_HZ = (0.04, 0.97)
LEAST = 0.0033  # amplitude, ln
PEAK = 40.0  # the line's three bins over the mean of twenty neighbours
ALONG, EVEN, EVEN_HARD, LAST = 0.9, 0.55, 0.65, 0.7
SLOW_HZ, AFTER_DOSE_HZ = 0.06, 0.046
CLIP = 0.08
GONE = 0.45
LEAD_S, TAIL_S = 74.0, 18.0


class Tone(NamedTuple):
    """A steady line: amplitude (ln), frequency, and the amplitude of each 20 s quarter."""

    amplitude: float
    hz: float
    quarters: tuple[float, ...]


class Hum:
    """The means of the last 80 s."""

    def __init__(self) -> None:
        self._group = 0
        self._left = np.empty(0)
        self._means = np.empty(0)
        self._every_s = 0.0  # between two means
        self._waiting: list[Second] = []
        self._last_k: int | None = None

    def forget(self) -> None:
        """Begin anew."""
        self.__init__()  # type: ignore[misc]

    def take(self, second: Second, rate_hz: float) -> bool:
        """Take a second; True when it is time to listen."""
        if second.n_rows == second.zeros:
            if self._last_k is not None and second.k - self._last_k > 2:
                self.forget()
            return False
        if self._last_k is not None and second.k - self._last_k > 3:
            self.forget()
        self._last_k = second.k
        self._waiting.append(second)
        if second.k % EVERY_S != EVERY_S - 1:
            return False
        self._gather(rate_hz)
        return self._every_s > 0 and len(self._means) * self._every_s >= SPAN_S

    def _gather(self, rate_hz: float) -> None:
        group = max(int(0.45 * rate_hz + 1e-9), 1)
        if self._group == 0 or abs(group - self._group) > 1 + 0.2 * self._group:
            self._group, self._left, self._means = group, np.empty(0), np.empty(0)
        rows = [second.period_us for second in self._waiting]
        spent_s = len(rows)
        self._waiting = []
        period = np.concatenate(rows)
        ln_us = np.concatenate((self._left, np.log(period[period > 0])))
        whole = len(ln_us) // self._group * self._group
        self._left = ln_us[whole:]
        table = ln_us[:whole].reshape(-1, self._group)
        means = (
            table.mean(axis=1)
            if self._group < 3
            else np.sort(table, axis=1)[:, self._group // 4 : self._group - self._group // 4].mean(
                axis=1
            )
        )
        every_s = self._group / (len(period) / spent_s)
        self._every_s += (0.1 if self._every_s else 1.0) * (every_s - self._every_s)
        keep = int(SPAN_S / self._every_s) + 1
        self._means = np.concatenate((self._means, means))[-keep:]

    def listen(self, after_dose: bool, said: Tone | None) -> Tone | None:
        """The steady line in the last 80 s, if there is one loud enough."""
        flat = _flat(self._means)
        if said is None and float(flat @ flat) / len(flat) < 0.3 * 0.5 * LEAST**2:
            return None
        n = len(flat)
        power = np.abs(np.fft.rfft(flat * np.hanning(n))) ** 2
        hz = np.fft.rfftfreq(n, self._every_s)
        inside = np.flatnonzero((hz >= BAND_HZ[0]) & (hz <= min(BAND_HZ[1], 0.48 / self._every_s)))
        if len(inside) < 8:
            return None
        at = int(inside[power[inside].argmax()])
        around = np.r_[max(at - 12, 1) : max(at - 2, 1), at + 3 : min(at + 13, len(power))]
        if power[max(at - 1, 0) : at + 2].sum() < PEAK * power[around].mean():
            return None
        return self._tone(flat, _refined(power, at) * float(hz[1]), after_dose)

    def _tone(self, flat: Floats, hz: float, after_dose: bool) -> Tone | None:
        n = len(flat)
        turn = np.exp(-2j * math.pi * hz * self._every_s * np.arange(n))
        blur = np.sinc(hz * self._every_s)  # what the means take off the amplitude
        quarters = [2.0 * part.mean() / blur for part in np.array_split(flat * turn, 4)]
        sizes = [abs(quarter) for quarter in quarters]
        amplitude = abs(sum(quarters)) / 4.0
        even = EVEN_HARD if hz < SLOW_HZ or after_dose else EVEN
        if amplitude < LEAST or (after_dose and hz < AFTER_DOSE_HZ):
            return None
        if abs(sum(quarters)) < ALONG * sum(sizes) or min(sizes) < even * max(sizes):
            return None
        if sizes[-1] < LAST * amplitude:
            return None
        return Tone(amplitude, hz, tuple(sizes))

    def faded(self, tone: Tone) -> bool:
        """Whether the last third holds less than half of the tone."""
        last = _flat(self._means)[-len(self._means) // 3 :]
        turn = np.exp(-2j * math.pi * tone.hz * self._every_s * np.arange(len(last)))
        blur = np.sinc(tone.hz * self._every_s)
        return bool(abs(2.0 * (last * turn).mean() / blur) < GONE * tone.amplitude)

    def tonal(self) -> bool:
        """Whether three lines hold most of the power of the last 32 s: jumps of an oscillation."""
        n = int(32.0 / self._every_s) if self._every_s > 0 else 0
        if n < 16 or len(self._means) < n:
            return False
        power = np.abs(np.fft.rfft(_flat(self._means[-n:]))) ** 2
        at = int(power[1:].argmax()) + 1
        return bool(power[at - 1 : at + 2].sum() > 0.6 * power[1:].sum())


def _flat(values: Floats) -> Floats:
    """The values without their quadratic, clipped."""
    n = len(values)
    x = np.linspace(-1.0, 1.0, n)
    rest = values - np.median(values)
    rest = np.clip(rest, -2.0 * CLIP, 2.0 * CLIP)
    rest = rest - rest.mean()
    rest = rest - x * (float(x @ rest) / float(x @ x))
    curve = x * x - float(x @ x) / n
    rest = rest - curve * (float(curve @ rest) / float(curve @ curve))
    return np.clip(rest, -CLIP, CLIP)


def _refined(power: Floats, at: int) -> float:
    """Place of a line between the bins, from the three about it."""
    if not 0 < at < len(power) - 1:
        return float(at)
    a, b, c = np.log(power[at - 1 : at + 2] + 1e-300).tolist()
    return at + 0.5 * (a - c) / (a - 2.0 * b + c)

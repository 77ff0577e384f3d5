"""`hum`: a steady oscillation of the period, from 0.04 Hz to 1 Hz or half the reading rate.

Means of up to half a second, 80 s of them, heard every ten seconds. A thermostat is slower,
ringing after a dose fades (the quarters differ), mixing has no phase. In white noise a line 40
times its neighbours comes about once in 10,000 h.

Most of the time the means scatter less than the least hum would make them: then that is all.
"""

from __future__ import annotations

import functools
import math
from typing import NamedTuple

import numpy as np

from monitor.blocks import Floats, Second
from monitor.findings import Finding
from monitor.trust.force import InForce

SPAN_S, EVERY_S = 80.0, 10
GROUP_S = 0.45  # of readings in one mean, at most
BAND_HZ = (0.04, 0.97)
LEAST = 0.0033  # amplitude, ln
PEAK = 40.0  # the line's three bins over the mean of twenty neighbours
ALONG, EVEN, EVEN_HARD, LAST = 0.9, 0.55, 0.65, 0.7
SLOW_HZ, AFTER_DOSE_HZ = 0.06, 0.046
CLIP = 0.08
GONE = 0.45
DEAFENING = ("stuck", "short", "no-pulses", "loose-lead")
LEAD_S, TAIL_S = 74.0, 18.0
# variance of the means that the least hum makes: half a second takes a third off 0.97 Hz
LEAST_VARIANCE = 0.8 * 0.5 * (0.65 * LEAST) ** 2
_NONE = np.empty(0)


class Tone(NamedTuple):
    """A steady line: amplitude (ln), frequency, and the amplitude of each 20 s quarter."""

    amplitude: float
    hz: float
    quarters: tuple[float, ...]


class Hum:
    """The means of the last 80 s."""

    def __init__(self) -> None:
        self.forget()

    def forget(self) -> None:
        """Begin anew."""
        self.tone: Tone | None = None  # the one in force
        self._group = 0  # readings in a mean
        self._left = _NONE  # readings that make no whole group yet
        self._means = _NONE  # us
        self._every_s = 0.0  # between two means
        self._waiting: list[Second] = []
        self._last_k = self._gathered_k = -1

    def take(self, second: Second, rate_hz: float) -> bool:
        """Take a second; True when it is time to listen."""
        k = second.k
        if second.n_rows == second.zeros:
            if self._last_k >= 0 and k - self._last_k > 2:
                self.forget()
            return False
        if self._last_k >= 0 and k - self._last_k > 3:
            self.forget()
        if self._last_k < 0:
            self._gathered_k = k - 1
        self._last_k = k
        self._waiting.append(second)
        if k % EVERY_S != EVERY_S - 1 and len(self._waiting) < EVERY_S:
            return False
        self._gather(rate_hz)
        return len(self._means) * self._every_s >= SPAN_S

    @property
    def loud(self) -> bool:
        """Whether the means scatter as much as the least hum makes them."""
        means = self._means
        mean = float(np.add.reduce(means)) / len(means)
        square = float(np.add.reduce(means * means)) / len(means)
        return square - mean * mean >= LEAST_VARIANCE * mean * mean

    def _gather(self, rate_hz: float) -> None:
        group = max(int(GROUP_S * rate_hz + 1e-9), 1)
        if self._group == 0 or abs(group - self._group) > 1 + 0.2 * self._group:
            self._group, self._left, self._means = group, _NONE, _NONE
        group = self._group
        period_us = _pulses(self._waiting)
        every_s = group * (self._last_k - self._gathered_k) / len(period_us)
        self._gathered_k = self._last_k
        self._waiting = []
        self._every_s += (0.1 if self._every_s else 1.0) * (every_s - self._every_s)
        if len(self._left):
            period_us = np.concatenate((self._left, period_us))
        whole = len(period_us) // group * group
        self._left = period_us[whole:]
        table = period_us[:whole].reshape(-1, group)
        means = np.add.reduce(table, axis=1) / group if group > 1 else table[:, 0]
        keep = int(SPAN_S / self._every_s) + 1
        self._means = np.concatenate((self._means, means))[-keep:]

    def judge(self, t: float, after_dose: bool, force: InForce) -> list[Finding]:
        """`hum` begun or ended, ten seconds after it was asked last."""
        if "hum" in force:
            return self._ended(t, after_dose, force)
        if not self.loud or force.any_of(*DEAFENING):
            return []
        self.tone = self.listen(after_dose)
        if self.tone is None:
            return []
        quarters = ", ".join(f"{100.0 * size:.2f}" for size in self.tone.quarters)
        text = f"{self.tone.hz:.3f} Hz, {100.0 * self.tone.amplitude:.2f} % of the period"
        return [force.begin("hum", t, t - LEAD_S, f"{text}; each 20 s {quarters} %")]

    def _ended(self, t: float, after_dose: bool, force: InForce) -> list[Finding]:
        if self.tone is None:  # begun before what is heard: still there?
            self.tone = self.listen(after_dose)
            return [] if self.tone else [force.end("hum", t, t - SPAN_S)]
        if not self.faded(self.tone):
            return []
        self.tone = None
        return [force.end("hum", t, t - TAIL_S)]

    def listen(self, after_dose: bool) -> Tone | None:
        """The steady line in the last 80 s, if there is one loud enough."""
        flat = _flat(self._means)
        n = len(flat)
        if float(np.add.reduce(flat * flat)) < LEAST_VARIANCE * n:
            return None
        line = np.fft.rfft(flat * _shapes(n)[2])
        power = line.real**2 + line.imag**2
        step_hz = 1.0 / (n * self._every_s)
        low = math.ceil(BAND_HZ[0] / step_hz)
        high = int(min(BAND_HZ[1], 0.48 / self._every_s) / step_hz)
        if high - low < 7:
            return None
        at = low + int(power[low : high + 1].argmax())
        below, above = power[max(at - 12, 1) : at - 2], power[at + 3 : at + 13]
        around = float(np.add.reduce(below) + np.add.reduce(above)) / (len(below) + len(above))
        if power[at - 1] + power[at] + power[at + 1] < PEAK * around:
            return None
        return self._tone(flat, _refined(power, at) * step_hz, after_dose)

    def _tone(self, flat: Floats, hz: float, after_dose: bool) -> Tone | None:
        turn = np.exp(-2j * math.pi * hz * self._every_s * np.arange(len(flat)))
        blur = self._blur(hz)
        quarters = [2.0 * part.mean() / blur for part in np.array_split(flat * turn, 4)]
        sizes = [float(abs(quarter)) for quarter in quarters]
        amplitude = float(abs(sum(quarters))) / 4.0
        even = EVEN_HARD if hz < SLOW_HZ or after_dose else EVEN
        if amplitude < LEAST or (after_dose and hz < AFTER_DOSE_HZ):
            return None
        if 4.0 * amplitude < ALONG * sum(sizes) or min(sizes) < even * max(sizes):
            return None
        if sizes[-1] < LAST * amplitude:
            return None
        return Tone(amplitude, hz, tuple(sizes))

    def faded(self, tone: Tone) -> bool:
        """Whether the last third holds less than half of the tone."""
        last = _flat(self._means)[-len(self._means) // 3 :]
        turn = np.exp(-2j * math.pi * tone.hz * self._every_s * np.arange(len(last)))
        size = abs(2.0 * (last * turn).mean() / self._blur(tone.hz))
        return bool(size < GONE * tone.amplitude)

    def _blur(self, hz: float) -> float:
        """What a mean of `group` readings leaves of an amplitude."""
        angle = math.pi * hz * self._every_s
        return math.sin(angle) / (self._group * math.sin(angle / self._group))

    def tonal(self) -> bool:
        """Whether three lines hold most of the power of the last 32 s: jumps of an oscillation."""
        n = int(32.0 / self._every_s) if self._every_s > 0 else 0
        if n < 16 or len(self._means) < n:
            return False
        power = np.abs(np.fft.rfft(_flat(self._means[-n:]))) ** 2
        at = int(power[1:].argmax()) + 1
        return bool(power[at - 1 : at + 2].sum() > 0.6 * power[1:].sum())


def _pulses(seconds: list[Second]) -> Floats:
    """The pulses of consecutive seconds; at least one."""
    first, last = seconds[0], seconds[-1]
    block = first.block
    if block is not None and block is last.block:
        period_us = block.period_us[first.start : last.stop]
    else:
        period_us = np.concatenate([second.period_us for second in seconds])
    if any(second.zeros for second in seconds):
        period_us = period_us[period_us > 0]
    return period_us


@functools.lru_cache(maxsize=16)
def _shapes(n: int) -> tuple[Floats, Floats, Floats]:
    """A line and a parabola of unit length, and the window, (n,) each."""
    x = np.linspace(-1.0, 1.0, n)
    curve = x * x - np.add.reduce(x * x) / n
    unit = [shape / math.sqrt(np.add.reduce(shape * shape)) for shape in (x, curve)]
    return unit[0], unit[1], np.hanning(n)


def _flat(means_us: Floats) -> Floats:
    """ln of the means without their quadratic, clipped."""
    n = len(means_us)
    straight, curve, _ = _shapes(n)
    values = np.log(means_us)
    rest = _clipped(values - np.partition(values, n // 2)[n // 2], 2.0 * CLIP)
    rest -= np.add.reduce(rest) / n
    rest -= straight * np.add.reduce(straight * rest)
    rest -= curve * np.add.reduce(curve * rest)
    return _clipped(rest, CLIP)


def _clipped(values: Floats, most: float) -> Floats:
    return np.minimum(np.maximum(values, -most), most)


def _refined(power: Floats, at: int) -> float:
    """Place of a line between the bins, from the three about it."""
    if not 0 < at < len(power) - 1:
        return float(at)
    a, b, c = np.log(power[at - 1 : at + 2] + 1e-300).tolist()
    return float(at + 0.5 * (a - c) / (a - 2.0 * b + c))

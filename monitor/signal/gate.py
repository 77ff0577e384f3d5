"""The row gate: which readings are strays against their neighbours.

A reading is a stray when the ln of its period differs from that of the median of the last nine
(itself the last) by more than a bound. The bound follows the probe's own noise, measured once on
its first 120 pulses; a lone spike is dropped, a step of the water passes after five readings.
"""

from __future__ import annotations

import math

import numpy as np

from monitor.blocks import Floats

WINDOW = 9
LEAST_BOUND = 0.03  # of ln period: no probe's noise, but less than any bubble worth the name
NOISE_FACTOR = 8.0  # robust standard deviations; noise alone passes it less than once a year
LEARN_PULSES = 120


def running_median_9(values: Floats) -> Floats:
    """Medians of nine consecutive values, (n - 8,) of (n,), by shared sorted triples.

    Only minima and maxima, so the same to the bit wherever the array was cut.
    """
    a, b, c = values[:-2], values[1:-1], values[2:]
    low, high = np.minimum(a, b), np.maximum(a, b)
    middle = np.maximum(low, np.minimum(high, c))
    low, high = np.minimum(low, c), np.maximum(high, c)
    n = len(values) - WINDOW + 1
    parts = [slice(i, i + n) for i in (0, 3, 6)]
    most_low = np.maximum(np.maximum(low[parts[0]], low[parts[1]]), low[parts[2]])
    least_high = np.minimum(np.minimum(high[parts[0]], high[parts[1]]), high[parts[2]])
    m0, m1, m2 = (middle[part] for part in parts)
    mid = np.maximum(np.minimum(m0, m1), np.minimum(np.maximum(m0, m1), m2))
    lo, hi = np.minimum(most_low, mid), np.maximum(most_low, mid)
    return np.maximum(lo, np.minimum(hi, least_high))


class Gate:
    """Drops stray pulses; carries the last eight pulses and the bound from call to call."""

    def __init__(self) -> None:
        self.history = np.empty(0)  # ln period of the last eight pulses
        self.bound = LEAST_BOUND
        self.learning: list[float] | None = []  # ln periods until the bound is known

    def passes(self, ln_us: Floats) -> np.ndarray:
        """Which pulses are no strays, (n,) bool, of (n,) ln periods of whole seconds."""
        if not len(self.history):
            self.history = np.full(WINDOW - 1, ln_us[0])
        joined = np.concatenate((self.history, ln_us))
        self.history = joined[1 - WINDOW :].copy()
        return np.asarray(np.abs(ln_us - running_median_9(joined)) <= self.bound)

    def learn(self, ln_us: Floats) -> None:
        """Take these pulses for the noise until there are enough; then set the bound for good."""
        if self.learning is None:
            return
        self.learning.extend(ln_us.tolist())
        if len(self.learning) >= LEARN_PULSES:
            steps = np.abs(np.diff(self.learning))
            scale = 1.4826 * float(np.median(steps)) / math.sqrt(2)
            self.bound = max(LEAST_BOUND, NOISE_FACTOR * scale)
            self.learning = None

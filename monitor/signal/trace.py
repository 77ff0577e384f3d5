"""The filtered trace on the screen: a causal median, then an EWMA, over seconds.

Rows have passed the row gate (a running median of nine) and were averaged a second before, so the
windows are in seconds and mean the same at 1 and at 2500 readings/s. Nothing that is judged uses
this: it is for the eye, and its lengths are the bench file's to say (median_s, ewma_s).
"""

from __future__ import annotations

import math
from collections import deque

from monitor.blocks import NAN

GAP_S = 10  # without a value the trace begins anew


class TraceFilter:
    """Filters one probe's values, second by second."""

    def __init__(self, median_s: float, ewma_s: float) -> None:
        """`median_s`: window of the median, rounded to whole seconds; `ewma_s`: time constant."""
        self._window: deque[float] = deque(maxlen=max(round(median_s), 1))
        self._blend = 1.0 - math.exp(-1.0 / ewma_s)
        self._value = NAN
        self._k = -(1 << 60)

    def step(self, k: int, value: float) -> float:
        """The filtered value of second k; NaN in gives NaN out and changes nothing."""
        if value != value:
            return NAN
        if k - self._k > GAP_S:
            self._window.clear()
            self._value = NAN
        self._k = k
        self._window.append(value)
        ordered = sorted(self._window)
        n = len(ordered)
        middle = 0.5 * (ordered[(n - 1) // 2] + ordered[n // 2])
        if self._value != self._value:
            self._value = middle
        else:
            self._value += self._blend * (middle - self._value)
        return self._value

"""The few types that travel the data's path: Block and Event out of a log, Second into the judges.

Times are seconds of the run (its `started` is 0), periods are microseconds, temperatures Celsius.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

NAN = float("nan")


class Block(NamedTuple):
    """Consecutive rows of one log, in the order of the file; read-only columns of equal length.

    time_s : (n,) float64, never goes back
    period_us : (n,) float64, 0 = no pulse
    temp_c : (n,) float64, NaN = no valid temperature in that row
    """

    time_s: Floats
    period_us: Floats
    temp_c: Floats


class Event(NamedTuple):
    """One `#!` line of a log: when it happened, what kind, and its fields."""

    time_s: float
    kind: str
    fields: Mapping[str, Any]


class Second:
    """All that the log said in the closed second [k, k + 1), gathered once for every judge.

    The scalars are Python floats (NaN where there is nothing to say). `time_s` and `period_us`
    are views of the second's rows, for a judge that has to look closer.
    """

    __slots__ = (
        "block",
        "events",
        "high_us",
        "jitter",
        "k",
        "low_us",
        "mean_us",
        "median_us",
        "n",
        "n_rows",
        "salinity_pct",
        "start",
        "stop",
        "t",
        "temp_c",
        "temp_used_c",
        "zeros",
    )

    def __init__(self, k: int) -> None:
        self.k = k  # the second's number
        self.t = k + 1.0  # when what it tells is known: its end
        self.block: Block | None = None  # rows start:stop of it are this second's
        self.start = self.stop = 0
        self.n_rows = 0  # rows, zeros and stray readings included
        self.zeros = 0  # rows with period 0
        self.n = 0  # pulses that passed the row gate
        self.mean_us = NAN  # their mean
        self.median_us = NAN  # of all pulses, gated or not
        self.low_us = NAN  # shortest period of all pulses
        self.high_us = NAN  # longest
        self.jitter = NAN  # mean |difference of neighbours' ln period|, pulses only
        self.temp_c = NAN  # mean of the second's temperatures
        self.temp_used_c = NAN  # smoothed and held; NaN = none for ten minutes
        self.salinity_pct = NAN  # of mean_us at temp_used_c, where there is a calibration
        self.events: tuple[Event, ...] = ()

    @property
    def time_s(self) -> Floats:
        """Times of the rows, (n_rows,)."""
        return self.block.time_s[self.start : self.stop] if self.block else np.empty(0)

    @property
    def period_us(self) -> Floats:
        """Periods of the rows, (n_rows,), zeros included."""
        return self.block.period_us[self.start : self.stop] if self.block else np.empty(0)

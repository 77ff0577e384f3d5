"""Traces of bounded memory: raw rows for minutes, a row a second for hours, one a minute beyond."""

from __future__ import annotations

from array import array
from bisect import bisect_left
from collections import deque

import numpy as np

from monitor.blocks import NAN, Floats, Second

SECONDS_MOST = 18_000  # five hours
MINUTES_MOST = 64_800  # 45 days
RAW_MOST = 40_000  # rows

TANK, DOUBTFUL, NOT_TANK = 1.0, 0.5, 0.0  # how good a reading is


class Columns:
    """Equally long columns of floats, in order of the first one; the oldest rows are dropped."""

    def __init__(self, n: int, most: int) -> None:
        self.most = most
        self.columns = [array("d") for _ in range(n)]

    def append(self, row: tuple[float, ...]) -> None:
        """Add a row at the end."""
        for column, value in zip(self.columns, row):
            column.append(value)

    def forget(self) -> None:
        """Drop the oldest rows once there are twice as many as are kept."""
        if len(self.columns[0]) >= 2 * self.most:
            for column in self.columns:
                del column[: self.most]

    def between(self, from_t: float, to_t: float) -> list[Floats]:
        """Copies of the rows whose first column lies in [from_t, to_t), (n,) each."""
        times = self.columns[0]
        i, j = bisect_left(times, from_t), bisect_left(times, to_t)
        return [np.frombuffer(column[i:j], np.float64) for column in self.columns]

    @property
    def first_t(self) -> float:
        """Time of the oldest row; NaN without one."""
        return self.columns[0][0] if self.columns[0] else NAN

    @property
    def last_t(self) -> float:
        """Time of the newest row; NaN without one."""
        return self.columns[0][-1] if self.columns[0] else NAN


class Trace:
    """Seconds and minutes of one lane.

    A second's columns: middle (s), value, filtered value, how good, period (us), temperature (C),
    jitter. A minute's: middle (s), lowest, mean, highest value of the tank's seconds, share of
    seconds that are the tank's, mean jitter.
    """

    def __init__(self) -> None:
        self.seconds = Columns(7, SECONDS_MOST)
        self.minutes = Columns(6, MINUTES_MOST)
        self._next_t = -np.inf  # end of the minute at hand
        self._n = self._good = 0
        self._sum = self._jitter = 0.0
        self._low, self._high = np.inf, -np.inf

    def add(
        self,
        second: Second,
        offset_s: float,
        value: float,
        filtered: float,
        good: float,
    ) -> None:
        """Take a second that has readings."""
        t = second.k + offset_s
        jitter = second.jitter
        times, values, smooth, goods, periods, temps, jitters = self.seconds.columns
        times.append(t + 0.5)
        values.append(value)
        smooth.append(filtered)
        goods.append(good)
        periods.append(second.mean_us)
        temps.append(second.temp_used_c)
        jitters.append(jitter)
        if t >= self._next_t:
            self._close(t)
        self._n += 1
        self._jitter += jitter if jitter == jitter else 0.0
        if good and value == value:
            self._good += 1
            self._sum += value
            if value < self._low:
                self._low = value
            if value > self._high:
                self._high = value

    def _close(self, t: float) -> None:
        """The minute is over; `t` lies in another."""
        self.seconds.forget()
        if self._n:
            mean = self._sum / self._good if self._good else NAN
            low, high = (self._low, self._high) if self._good else (NAN, NAN)
            share = self._good / self._n
            middle = self._next_t - 30.0
            self.minutes.append((middle, low, mean, high, share, self._jitter / self._n))
            self.minutes.forget()
        self._next_t = 60.0 * (t // 60.0) + 60.0
        self._n = self._good = 0
        self._sum = self._jitter = 0.0
        self._low, self._high = np.inf, -np.inf


class Raw:
    """The newest rows as they were read: the seconds that hold them, at most RAW_MOST rows."""

    def __init__(self) -> None:
        self.seconds: deque[tuple[float, Second]] = deque()
        self._rows = 0

    def add(self, second: Second, offset_s: float) -> None:
        """Take a second that has rows."""
        self.seconds.append((offset_s, second))
        self._rows += second.n_rows
        while self._rows > RAW_MOST and len(self.seconds) > 1:
            self._rows -= self.seconds.popleft()[1].n_rows

    def between(self, from_t: float, to_t: float) -> tuple[Floats, Floats, Floats]:
        """Times (s), periods (us, pulses only) and the temperature used (C), (n,) each."""
        kept = [(by, s) for by, s in self.seconds if from_t - 1.0 < s.k + by < to_t]
        if not kept:
            return np.empty(0), np.empty(0), np.empty(0)
        time_s = np.concatenate([s.time_s + by for by, s in kept])
        period = np.concatenate([s.period_us for _, s in kept])
        temp = np.repeat([s.temp_used_c for _, s in kept], [s.n_rows for _, s in kept])
        inside = (period > 0) & (time_s >= from_t) & (time_s < to_t)
        return time_s[inside], period[inside], temp[inside]

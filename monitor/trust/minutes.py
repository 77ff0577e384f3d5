"""One record a minute of a probe's level, and straight lines through stretches of them.

Rules:
- A minute counts when the level was sure for 20 s of it; its value is a cleaned mean.
- A segment is a stretch in which nothing but a slow change moves the level; between segments the
  level is free, only the slope is common.
- MOST minutes are kept.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.blocks import NAN, Floats
from monitor.trust.measures import allan_deviation

MOST = 400
ENDS = 5  # minutes whose mean stands for an end of a stretch
TIE_PER_C = 0.0015  # what the temperature law may leave of a coefficient, relative per Celsius
_COLUMNS = 5


class Line(NamedTuple):
    """A straight line through minutes, the levels of the segments free."""

    slope: float  # value's unit an hour
    u: float  # its standard uncertainty
    rms: float  # of the residuals
    span_h: float
    rise: float  # slope * span
    share: float  # of the change between the thirds: the last against both; 0.5 = straight
    by_temp: float  # what temperature could explain of the rise; NaN without a thermometer


class Minutes:
    """The newest minutes: end of the minute, ln level, temperature, salinity, segment."""

    def __init__(self) -> None:
        self._table = np.zeros((_COLUMNS, 2 * MOST))
        self.start = self.stop = 0
        self.joined: list[float] = []  # the level with the jumps between segments taken out
        self._sums = [0.0]  # of joined

    def __len__(self) -> int:
        return self.stop - self.start

    def add(
        self, t: float, level: float, temp_c: float, salinity: float, segment: int, slope: float
    ) -> None:
        """One more minute. `slope` an hour is expected to go on across a segment's border."""
        if self.stop == 2 * MOST:
            self._table[:, :MOST] = self._table[:, MOST:]
            self.start, self.stop = 0, MOST
        joined = level
        if len(self):
            last = self.stop - 1
            joined += self.joined[-1] - float(self._table[1, last])
            if self._table[4, last] != segment:
                gap_h = (t - float(self._table[0, last])) / 3600.0
                joined = self.recent(ENDS) + slope * gap_h
        self._table[:, self.stop] = (t, level, temp_c, salinity, segment)
        self.stop += 1
        self.start = max(self.start, self.stop - MOST)
        self.joined.append(joined)
        self._sums.append(self._sums[-1] + joined)
        if len(self.joined) > MOST:
            del self.joined[0], self._sums[0]

    def forget(self, t: float) -> None:
        """Drop the minutes up to t."""
        ends = self._table[0, self.start : self.stop]
        n = int(np.searchsorted(ends, t, side="right"))
        self.start += n
        del self.joined[:n], self._sums[:n]

    def recent(self, n: int, before: int = 0) -> float:
        """Mean of the joined level over n minutes that end `before` minutes back."""
        stop = len(self.joined) - before
        start = max(stop - n, 0)
        return (self._sums[stop] - self._sums[start]) / (stop - start)

    def moved(self, n: int) -> float:
        """Change of the joined level from the first to the last minutes of the last n."""
        return self.recent(ENDS) - self.recent(ENDS, n - ENDS)

    def column(self, which: int, n: int) -> Floats:
        """The last n of a column: 0 time, 1 level, 2 temperature, 3 salinity, 4 segment."""
        return self._table[which, self.stop - n : self.stop]

    def one_segment(self, n: int) -> bool:
        """Whether the last n minutes are of one segment."""
        return bool(self._table[4, self.stop - n] == self._table[4, self.stop - 1])

    def flicker(self, n: int) -> float:
        """Noise of the rise between the thirds of n minutes, from the minutes before them.

        The Allan deviation over a third; NaN where there are not n minutes before.
        """
        earlier = self.joined[:-n]
        if len(earlier) < n:
            return NAN
        return math.sqrt(2.0) * allan_deviation(np.array(earlier), n // 3)


def fit(time_s: Floats, value: Floats, temp_c: Floats, segment: Floats, scale: float) -> Line:
    """Straight line through minutes, temperature a covariate that is tied to nearly nothing.

    Parameters
    ----------
    time_s, value, temp_c, segment : (n,) float64, n >= 10; temp_c NaN = no thermometer
    scale : of the value, for which TIE_PER_C is relative (1 for an ln)

    The doubt of the slope is the larger of that of white noise, widened by the residuals' own
    correlation, and of flicker, 0.8 rms a span.
    """
    t = (time_s - time_s[0]) / 3600.0
    edges = np.flatnonzero(np.diff(segment)) + 1
    t0, v0 = _centred(t, edges), _centred(value, edges)
    tt, tv = float(t0 @ t0), float(t0 @ v0)
    slope, coefficient, spread, drift = tv / tt, 0.0, 1.0 / tt, NAN
    warm = float(np.sum(temp_c))
    c0 = t0
    if warm == warm:
        c0 = _centred(temp_c, edges)
        steps = np.diff(v0)
        white = max(0.5 * float(np.median(steps * steps)) / 0.455, (1e-6 * scale) ** 2)
        tc = float(t0 @ c0)
        cc = float(c0 @ c0) + white / (TIE_PER_C * scale) ** 2
        cv = float(c0 @ v0)
        det = tt * cc - tc * tc
        slope, coefficient = (tv * cc - tc * cv) / det, (tt * cv - tc * tv) / det
        spread, drift = cc / det, tc / tt
    straight = v0 - slope * t0 - (coefficient * c0 if coefficient else 0.0)
    freedom = max(len(t) - len(edges) - 3, 1)
    square = float(straight @ straight)
    rms = math.sqrt(square / freedom)
    lag = float(straight[1:] @ straight[:-1]) / square if square > 0.0 else 0.0
    lag = min(max(lag, 0.0), 0.9)
    span_h = float(t[-1])
    u = max(rms * math.sqrt(spread * (1.0 + lag) / (1.0 - lag)), 0.8 * rms / span_h)
    share = _share(straight + slope * t)
    by_temp = abs(drift) * TIE_PER_C * scale * span_h
    return Line(slope, u, rms, span_h, slope * span_h, share, by_temp)


def knee(time_s: Floats, level: Floats) -> tuple[float, float]:
    """When a creep began and the level before it: flat, then a line, by least squares.

    time_s, level : (n,) float64, n > ENDS
    """
    knees = time_s[:-ENDS]
    ramps = np.maximum(time_s - knees[:, None], 0.0)
    ramps -= ramps.mean(axis=1)[:, None]
    off = level - level.mean()
    gain = ramps @ off
    best = int(np.argmax(gain * gain / (ramps * ramps).sum(axis=1)))
    ramp = ramps[best]
    slope = float(gain[best]) / float(ramp @ ramp)
    return float(knees[best]), float(level.mean()) + slope * float(ramp[0])


def _centred(values: Floats, edges: NDArray[np.intp]) -> Floats:
    """The values less the mean of their segment."""
    if not len(edges):
        return np.asarray(values - float(np.add.reduce(values)) / len(values))
    parts = np.split(values, edges)
    return np.concatenate([part - part.mean() for part in parts])


def _share(line: Floats) -> float:
    third = len(line) // 3
    a, b, c = (float(part.mean()) for part in (line[:third], line[third:-third], line[-third:]))
    return (c - b) / (c - a) if c != a else NAN

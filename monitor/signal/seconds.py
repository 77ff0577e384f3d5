"""Rows and events into whole seconds.

Rules (they make every result independent of how the rows were cut):
- A line (row or event) of time k + 1 or more closes second k and the empty ones up to its own.
- An event belongs to the second in which it is met, however old its time.
- A row of a second already closed goes back: dropped and counted.
- Every figure of a Second comes from its whole rows and from earlier seconds, never from a batch.
- After EMPTY_MOST empty seconds in a row nothing can fall due any more; the rest are stepped over.
"""

from __future__ import annotations

import math

import numpy as np

from monitor.blocks import NAN, Block, Event, Floats, Second
from monitor.signal.gate import Gate

EMPTY_MOST = 7200
TEMP_SMOOTH_S = 30.0
TEMP_HOLD_S = 600  # a missing temperature is the last one, for ten minutes at most
_BLEND = 1.0 - math.exp(-1.0 / TEMP_SMOOTH_S)
_NONE = np.empty(0)


class Gatherer:
    """Feeds on a log's blocks and events in order, gives its seconds as they close."""

    def __init__(self, first_second: int | None = 0) -> None:
        """`first_second` None: time begins with the first line (a part without its first one)."""
        self.open = first_second
        self.dropped = 0  # rows of seconds already closed
        self._rows = Block(_NONE, _NONE, _NONE)
        self._events: list[Event] = []
        self._empty = 0
        self._gate = Gate()
        self._last_ln = NAN
        self._temp = NAN
        self._temp_age = 0

    def feed(self, item: Block | Event) -> list[Second]:
        """Seconds that this item closes, in order."""
        if isinstance(item, Event):
            return self._meet(item)
        if not len(item.time_s):
            return []
        if self.open is None:
            self.open = int(item.time_s[0])
        if item.time_s[0] < self.open:
            late = int(np.searchsorted(item.time_s, float(self.open)))
            self.dropped += late
            item = Block(*(column[late:] for column in item))
            if not len(item.time_s):
                return []
        rows = item
        if len(self._rows.time_s):
            rows = Block(*(np.concatenate(pair) for pair in zip(self._rows, item, strict=True)))
        last = int(rows.time_s[-1])
        if last == self.open:
            self._rows = rows
            return []
        done = int(np.searchsorted(rows.time_s, float(last)))
        self._rows = Block(*(column[done:] for column in rows))
        return self._close(Block(*(column[:done] for column in rows)), last)

    def _meet(self, event: Event) -> list[Second]:
        k = math.floor(event.time_s)
        closed: list[Second] = []
        if self.open is None:
            self.open = k
        elif k > self.open:
            rows, self._rows = self._rows, Block(_NONE, _NONE, _NONE)
            closed = self._close(rows, k)
        self._events.append(event)
        return closed

    def _close(self, rows: Block, upto: int) -> list[Second]:
        """The seconds from the open one to before `upto`; `rows` are theirs, all of them."""
        assert self.open is not None
        full = self._seconds(rows) if len(rows.time_s) else []
        k, self.open = self.open, upto
        if len(full) == upto - k:  # no empty one among them, as nearly always
            seconds = full
            self._begin(full[0])
        else:
            seconds = []
            for second in full:
                if second.k > k:
                    self._empties(k, second.k, seconds)
                self._begin(second)
                seconds.append(second)
                k = second.k + 1
            self._empties(k, upto, seconds)
        self._warmth(seconds)
        return seconds

    def _begin(self, second: Second) -> None:
        """A second with rows: the events met so far are its."""
        if self._events:
            second.events = tuple(self._events)
            self._events.clear()
        self._empty = 0

    def _empties(self, k: int, upto: int, seconds: list[Second]) -> None:
        while k < upto:
            if self._events:
                empty = Second(k)
                empty.events = tuple(self._events)
                self._events.clear()
                seconds.append(empty)
                if any(event.kind != "alive" for event in empty.events):
                    self._empty = 0
            elif self._empty < EMPTY_MOST:
                seconds.append(Second(k))
            else:
                return
            self._empty += 1
            k += 1

    def _warmth(self, seconds: list[Second]) -> None:
        """Smooth and hold the temperature, a second at a time."""
        temp, age = self._temp, self._temp_age
        for second in seconds:
            now = second.temp_c
            if now == now:
                temp = now if temp != temp else temp + _BLEND * (now - temp)
                age = 0
            else:
                age += 1
                if age > TEMP_HOLD_S:
                    temp = NAN
            second.temp_used_c = temp
        self._temp, self._temp_age = temp, age

    def _seconds(self, rows: Block) -> list[Second]:
        """Seconds with rows, their figures filled in."""
        if self._gate.learning is None:
            return self._batch(rows)
        seconds: list[Second] = []  # the gate's bound may change after any of these
        number = rows.time_s.astype(np.int64)
        cuts = np.flatnonzero(np.diff(number)) + 1
        start = 0
        for cut in [*cuts.tolist(), len(number)]:
            if self._gate.learning is None:
                return seconds + self._batch(Block(*(column[start:] for column in rows)))
            seconds += self._batch(Block(*(column[start:cut] for column in rows)))
            start = cut
        return seconds

    def _batch(self, rows: Block) -> list[Second]:
        number = rows.time_s.astype(np.int64)
        starts = _edges(number)
        stops = np.append(starts[1:], len(number))
        seconds = []
        for k, start, stop in zip(number[starts].tolist(), starts.tolist(), stops.tolist()):
            second = Second(k)
            second.block, second.start, second.stop = rows, start, stop
            second.n_rows = stop - start
            seconds.append(second)
        self._temperatures(rows.temp_c, starts, seconds)
        pulse = rows.period_us > 0
        if pulse.all():
            self._pulses(rows.period_us, starts, seconds)
        else:
            zeros = np.add.reduceat((~pulse).astype(np.int64), starts)
            for second, count in zip(seconds, zeros.tolist()):
                second.zeros = count
            kept = [second for second in seconds if second.zeros < second.n_rows]
            if kept:
                self._pulses(rows.period_us[pulse], _edges(number[pulse]), kept)
        return seconds

    @staticmethod
    def _temperatures(temp_c: Floats, starts: np.ndarray, seconds: list[Second]) -> None:
        there = temp_c == temp_c
        if there.all():
            counts = np.diff(np.append(starts, len(temp_c))).astype(np.float64)
        elif not there.any():
            return
        else:
            counts = np.add.reduceat(there.astype(np.float64), starts)
            temp_c = np.where(there, temp_c, 0.0)
        sums = np.add.reduceat(temp_c, starts)
        for second, total, count in zip(seconds, sums.tolist(), counts.tolist()):
            if count:
                second.temp_c = total / count

    def _pulses(self, period_us: Floats, starts: np.ndarray, seconds: list[Second]) -> None:
        ln_us = np.log(period_us)
        passed = self._gate.passes(ln_us)
        self._gate.learn(ln_us)
        steps = np.empty_like(ln_us)
        steps[0] = ln_us[0] - self._last_ln if self._last_ln == self._last_ln else 0.0
        np.subtract(ln_us[1:], ln_us[:-1], out=steps[1:])
        np.abs(steps, out=steps)
        self._last_ln = float(ln_us[-1])
        sizes = np.diff(np.append(starts, len(period_us)))
        if passed.all():
            kept = sizes
            means = np.add.reduceat(period_us, starts) / sizes
        else:
            kept = np.add.reduceat(passed.astype(np.int64), starts)
            sums = np.add.reduceat(np.where(passed, period_us, 0.0), starts)
            means = np.where(kept > 0, sums / np.maximum(kept, 1), NAN)
        columns = zip(
            seconds,
            kept.tolist(),
            means.tolist(),
            np.minimum.reduceat(period_us, starts).tolist(),
            np.maximum.reduceat(period_us, starts).tolist(),
            _medians(period_us, starts, sizes).tolist(),
            (np.add.reduceat(steps, starts) / sizes).tolist(),
        )
        for second, n, mean, low, high, median, jitter in columns:
            second.n = n
            second.mean_us = mean
            second.low_us = low
            second.high_us = high
            second.median_us = median
            second.jitter = jitter


def _edges(number: np.ndarray) -> np.ndarray:
    """Where a new second begins, the first included."""
    return np.concatenate(([0], np.flatnonzero(number[1:] != number[:-1]) + 1))


def _medians(values: Floats, starts: np.ndarray, sizes: np.ndarray) -> Floats:
    """Median of each segment, (m,), by sorting segments padded to one width."""
    width = int(sizes.max())
    if sizes.min() == width:
        table = values.reshape(-1, width).copy()
    else:
        table = np.full((len(sizes), width), np.inf)
        table[np.arange(width) < sizes[:, None]] = values
    table.sort(axis=1)
    row = np.arange(len(sizes))
    return np.asarray(0.5 * (table[row, (sizes - 1) // 2] + table[row, sizes // 2]))

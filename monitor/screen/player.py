"""One probe's recorded runs, judged up to any time. Rows are cut where play stands."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from datetime import datetime

from monitor.bench import Bench
from monitor.blocks import Block, Event, Second
from monitor.chain import Chain, Judges
from monitor.findings import Finding, shifted
from monitor.logbook.parser import Item
from monitor.logbook.reader import Run
from monitor.view import Lane


class Player:
    """One probe's runs, judged up to a time."""

    def __init__(self, lane: Lane, runs: Sequence[Run], zero: datetime, given: Bench | None):
        self.lane = lane
        self.done = False
        self._zero = zero
        self._given = given
        self._runs = list(runs)
        self._next_run()

    def _next_run(self) -> None:
        run = self._runs.pop(0)
        self.offset = (run.started - self._zero).total_seconds()
        self.lane.begin_run(self.offset)
        first = 0 if run.parts[0].part == 1 else None
        self.chain = Chain(self.lane.probe, self._given, first, self._watch)
        self._items = _items(run)
        self._held: Item | None = None

    def _watch(self, second: Second, judges: Judges) -> None:
        self.lane.second(second, judges)

    def play(self, upto_t: float) -> list[Finding]:
        """Judge all lines before `upto_t`. Raises LogError, CalibrationError."""
        found: list[Finding] = []
        while not self.done and self.offset <= upto_t:
            item = self._held if self._held is not None else next(self._items, None)
            self._held = None
            if item is None:
                self._end_run()
                continue
            now, later = _cut(item, upto_t - self.offset)
            if now is not None:
                found += self.chain.feed(now)
            if later is not None:
                self._held = later
                break
        return [shifted(each, self.offset) for each in found] if self.offset else found

    def _end_run(self) -> None:
        if self._runs:
            self._next_run()
        else:
            self.done = True

    @property
    def closed_t(self) -> float:
        """Up to where all has been judged."""
        return self.chain.closed_t + self.offset


def _items(run: Run) -> Iterator[Item]:
    for part in run.parts:
        parser = run.parser()
        for chunk in part.chunks():
            yield from parser.feed(chunk)
        yield from parser.finish()


def _cut(item: Item, t: float) -> tuple[Item | None, Item | None]:
    """What of the item lies before `t`, and what does not. An event of old time goes on."""
    if isinstance(item, Event):
        return (item, None) if item.time_s < t else (None, item)
    i = int(item.time_s.searchsorted(t))
    if i == len(item.time_s):
        return item, None
    now = Block(*(column[:i] for column in item)) if i else None
    return now, Block(*(column[i:] for column in item))


def has_settings(run: Run) -> bool:
    """Whether a bench stands before the run's first row."""
    for item in _items(run):
        if isinstance(item, Block):
            return False
        if item.kind == "bench":
            return True
    return False


def last_t(run: Run, zero: datetime) -> float:
    """Time of a run's last line on the common time, s."""
    last = 0.0
    parser = run.parser()
    for chunk in run.parts[-1].chunks():
        for item in parser.feed(chunk):
            last = max(last, float(item.time_s[-1]) if isinstance(item, Block) else item.time_s)
    return last + 1.0 + (run.started - zero).total_seconds()

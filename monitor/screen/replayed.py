"""Recorded logs as a source: played, paused, sought, run on to the next finding.

Rows are cut where play stands; what is concluded does not depend on where that is.
"""

from __future__ import annotations

import time
from collections.abc import Iterator, Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any

from monitor.bench import Bench
from monitor.blocks import Block, Event, Second
from monitor.chain import Chain, Judges
from monitor.findings import Finding, in_order, shifted
from monitor.logbook import reader
from monitor.logbook.parser import Item
from monitor.logbook.reader import LogError, Run
from monitor.screen.source import ActError
from monitor.tanks import UNWATCHED_S, Unwatched
from monitor.view import Lane

SLICE_S = 120.0  # judged at a time, at most
HUNT_S = 1.0  # and while it runs on to a finding: it stops no farther behind
BUDGET_S = 0.06  # of a poll
WORTH_A_LOOK = ("fault", "belief", "rest", "limit", "unwatched", "notice", "trend")
SPEED_MOST = 3600.0
KEPT_S = 2 * UNWATCHED_S  # what an `unwatched` may still ask for


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


class ReplaySource:
    """Plays logs on the lanes of a screen."""

    live = False
    trouble = ""

    def __init__(
        self,
        paths: Sequence[str],
        given: Bench | None = None,
        speed: float = 60.0,
        bare_probe: str | None = None,
        bare_rate_hz: float | None = None,
    ) -> None:
        """Raises LogError if a file is no log, CalibrationError if standards allow no fit."""
        self._runs = reader.runs(paths, bare_probe, bare_rate_hz)
        for run in self._runs:
            if given is not None and run.probe not in given.probe:
                known = ", ".join(given.probe)
                name = Path(run.parts[0].path).name
                raise LogError(
                    f"{name}: probe {run.probe} is not in the bench; expected one of {known}"
                )
            if given is None and not _has_settings(run):
                name = Path(run.parts[0].path).name
                raise LogError(f"{name}: no bench event in it; expected --bench BENCH beside it")
        self.started = min(run.started for run in self._runs)
        self._given = given
        self.speed = speed
        self.playing = True
        self.end_s = max(_last_t(run, self.started) for run in self._runs)
        self._hunting = False
        self._polled: float | None = None
        self._target = 0.0
        self._left = 0.0  # where the hunt for a finding began
        self._begin()

    def _begin(self) -> None:
        names = list(dict.fromkeys(run.probe for run in self._runs))
        self.lanes = [Lane(name, self._given) for name in names]
        self._players = [
            Player(
                lane, [r for r in self._runs if r.probe == lane.probe], self.started, self._given
            )
            for lane in self.lanes
        ]
        self._tanks: dict[str, Unwatched] = {}
        self._done_s = 0.0

    @property
    def now_s(self) -> float:
        """How far play has come."""
        return self._done_s

    @property
    def caught_up(self) -> bool:
        """Whether play stands where it was sent."""
        return not self._hunting and self._done_s >= self._target

    @property
    def status(self) -> str:
        """Where play stands."""
        if self._hunting:
            return "looking for the next finding"
        if not self.caught_up:
            return "running on"
        if self._done_s >= self.end_s:
            return "at the end of the log"
        return f"playing {self.speed:g} times as fast" if self.playing else "paused"

    def poll(self) -> None:
        """Move on by the time that has passed, as far as the budget goes."""
        now = time.monotonic()
        passed = now - self._polled if self._polled is not None else 0.0
        self._polled = now
        if self.playing and not self._hunting and self._done_s >= self._target:
            self._target = min(self._done_s + passed * self.speed, self.end_s)
        self.advance(now + BUDGET_S)

    def advance(self, until: float = float("inf")) -> None:
        """Judge on to where play was sent, at most until this monotonic time."""
        while not self.caught_up and time.monotonic() < until:
            aim = self.end_s if self._hunting else self._target
            upto = min(self._done_s + (HUNT_S if self._hunting else SLICE_S), aim)
            worth = self._slice(upto)
            self._done_s = upto
            if self._hunting and (worth or upto >= self.end_s):
                self.seek(upto)

    def _slice(self, upto: float) -> list[Finding]:
        """Judge up to this time; what was found that is worth a look."""
        found: list[Finding] = []
        for player in self._players:
            found += player.play(upto)
        found += self._of_tanks()
        found = in_order(found)
        for finding in found:
            for lane in self.lanes:
                if lane.probe == finding.get("probe", lane.probe) and (
                    "probe" in finding or lane.tank == finding.get("tank")
                ):
                    lane.finding(finding)
        left = self._left
        return [f for f in found if f["finding"] in WORTH_A_LOOK and f["t"] > max(left, 1.0)]

    def _of_tanks(self) -> list[Finding]:
        found: list[Finding] = []
        for tank in {lane.tank for lane in self.lanes}:
            its = [player for player in self._players if player.lane.tank == tank]
            upto = min(player.closed_t for player in its)
            fold = self._tanks.setdefault(tank, Unwatched(tank))
            spans = [(p.lane.probe, p.chain.watched, p.offset) for p in its]
            found += fold.advance(upto, spans)
            for _, watched, offset in spans:
                watched.forget(upto - offset - KEPT_S)
        return found

    def seek(self, t: float) -> None:
        """Go on from this time; back in time all is judged again from the start."""
        self._hunting = False
        self._target = min(max(t, 0.0), self.end_s)
        if self._target < self._done_s:
            self._begin()

    def next_finding(self) -> None:
        """Run on to the next finding, and stop there."""
        self.playing = False
        self._hunting = True
        self._left = self._done_s

    async def order(
        self, kind: str, fields: Mapping[str, Any], probe: str, ago_s: float = 0.0
    ) -> None:
        """A log that is over takes no acts. Raises ActError."""
        raise ActError("this is a recording: what is planned here is not recorded")

    def close(self) -> None:
        """Nothing is held."""


def _has_settings(run: Run) -> bool:
    """Whether a bench stands before the run's first row."""
    for item in _items(run):
        if isinstance(item, Block):
            return False
        if item.kind == "bench":
            return True
    return False


def _last_t(run: Run, zero: datetime) -> float:
    """Time of a run's last line on the common time, s."""
    last = 0.0
    parser = run.parser()
    for chunk in run.parts[-1].chunks():
        for item in parser.feed(chunk):
            last = max(last, float(item.time_s[-1]) if isinstance(item, Block) else item.time_s)
    return last + 1.0 + (run.started - zero).total_seconds()

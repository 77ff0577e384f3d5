"""Recorded logs as a source: played, paused, sought, run on to the next finding.

What is concluded does not depend on where play stood. The same logs judged by another bench, or
another night's logs, can be played beside them: their lanes are marked and begin at the same time.
"""

from __future__ import annotations

import re
import time
from collections.abc import Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any, NamedTuple

from monitor.bench import Bench
from monitor.findings import Finding, in_order
from monitor.logbook import reader
from monitor.logbook.reader import LogError, Run
from monitor.screen.player import Player, has_settings, last_t
from monitor.screen.source import ActError
from monitor.tanks import UNWATCHED_S, Unwatched
from monitor.view import Lane

SLICE_S = 120.0  # judged at a time, at most
HUNT_S = 1.0  # and while it runs on to a finding: it stops no farther behind
BUDGET_S = 0.06  # of a poll
WORTH_A_LOOK = ("fault", "belief", "rest", "limit", "unwatched", "notice", "trend")
SPEED_MOST = 3600.0
KEPT_S = 2 * UNWATCHED_S  # what an `unwatched` may still ask for
BESIDE = "B"  # marks the lanes of what is played beside


class _Night(NamedTuple):
    """Runs that are judged alike: from when their time counts, by which bench, marked how."""

    runs: list[Run]
    zero: datetime
    given: Bench | None
    mark: str = ""

    @property
    def end_s(self) -> float:
        """Time of the last line."""
        return max(last_t(run, self.zero) for run in self.runs)

    def _place(self, probe: str) -> tuple[int, list[str | int]]:
        """The bench's order, or that of the names with their numbers."""
        place = list(self.given.probe).index(probe) if self.given is not None else 0
        parts = re.split(r"([0-9]+)", probe)
        return place, [int(part) if i % 2 else part for i, part in enumerate(parts)]

    def players(self) -> list[Player]:
        """A player a probe, each with a lane of its own."""
        made = []
        for name in sorted({run.probe for run in self.runs}, key=self._place):
            its = [run for run in self.runs if run.probe == name]
            made.append(Player(Lane(name, self.given, self.mark), its, self.zero, self.given))
        return made


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
        against: Bench | None = None,
        beside: Sequence[str] = (),
    ) -> None:
        """Raises LogError if a file is no log, CalibrationError if standards allow no fit.

        `against`: judge all once more by this bench. `beside`: logs of another time.
        """
        runs = _checked(reader.runs(paths, bare_probe, bare_rate_hz), given)
        self.started = min(run.started for run in runs)
        self._nights = [_Night(runs, self.started, given)]
        if against is not None:
            self._nights.append(_Night(_checked(runs, against), self.started, against, BESIDE))
        if beside:
            others = _checked(reader.runs(beside, bare_probe, bare_rate_hz), given)
            zero = min(run.started for run in others)
            self._nights.append(_Night(others, zero, given, BESIDE))
        self.speed = speed
        self.playing = True
        self.end_s = max(night.end_s for night in self._nights)
        self._hunting = False
        self._polled: float | None = None
        self._target = 0.0
        self._left = 0.0  # where the hunt for a finding began
        self._begin()

    def _begin(self) -> None:
        self._nights_playing = [night.players() for night in self._nights]
        self._tanks: dict[tuple[int, str], Unwatched] = {}
        self.lanes = [player.lane for players in self._nights_playing for player in players]
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
        all_found: list[Finding] = []
        for place, players in enumerate(self._nights_playing):
            found = [finding for player in players for finding in player.play(upto)]
            found = in_order(found + self._of_tanks(place, players))
            for finding in found:
                for player in players:
                    player.lane.hear(finding)
            all_found += found
        since = max(self._left, 1.0)
        return [f for f in all_found if f["finding"] in WORTH_A_LOOK and f["t"] > since]

    def _of_tanks(self, place: int, players: list[Player]) -> list[Finding]:
        found: list[Finding] = []
        for tank in {player.lane.tank for player in players}:
            its = [player for player in players if player.lane.tank == tank]
            upto = min(player.closed_t for player in its)
            fold = self._tanks.setdefault((place, tank), Unwatched(tank))
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


def _checked(runs: list[Run], given: Bench | None) -> list[Run]:
    """The runs, if there is something to judge them by. Raises LogError."""
    for run in runs:
        name = Path(run.parts[0].path).name
        if given is not None and run.probe not in given.probe:
            known = ", ".join(given.probe)
            raise LogError(
                f"{name}: probe {run.probe} is not in the bench; expected one of {known}"
            )
        if given is None and not has_settings(run):
            raise LogError(f"{name}: no bench event in it; expected --bench BENCH beside it")
    return runs

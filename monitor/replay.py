"""Recorded logs through the very chain that judged them live: findings of one probe or of many.

Each probe's runs are judged by themselves, one after the other; what takes two probes is folded
over them once all have closed a second. Findings come out in the order of their time, whatever the
order in which the files were read.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from functools import partial
from typing import Protocol

import numpy as np

from monitor.bench import Bench
from monitor.blocks import Second
from monitor.chain import Judges
from monitor.findings import Finding, shifted
from monitor.follow import Follower
from monitor.logbook import reader
from monitor.logbook.reader import LogError, Run
from monitor.tanks import Seen, Together, Watched

Witness = Callable[[str, float, Second, Judges], None]  # probe, offset of its run, ...


@dataclass
class Told:
    """What a replay has to say besides its findings, for standard error."""

    dropped: Counter[str] = field(default_factory=Counter)
    messages: list[str] = field(default_factory=list)


class ProbeReplay:
    """One probe's runs in order, advanced a chunk of file at a time."""

    def __init__(
        self,
        probe: str,
        runs: Sequence[Run],
        zero: datetime,
        given: Bench | None,
        witness: Witness | None = None,
    ) -> None:
        """`zero`: where the times of findings are counted from. `witness` sees each second."""
        _keep_pages()
        self.probe = probe
        self.zero = zero
        self.told = Told()
        self.done = False
        self._runs = list(runs)
        self._given = given
        self._witness = witness
        self._past: list[tuple[Watched, float]] = []
        self.follower: Follower
        self.offset = 0.0
        self._chunks: Iterator[bytes | None]
        self._next_run()

    def _next_run(self) -> None:
        if hasattr(self, "follower"):
            self._past.append((self.follower.chain.watched, self.offset))
        run = self._runs.pop(0)
        self.offset = (run.started - self.zero).total_seconds()
        watch = None
        if self._witness is not None:
            watch = partial(self._witness, self.probe, self.offset)
        self.follower = Follower(self.probe, self._given, run.parts[0].part, watch, run.parser())
        self._chunks = _text(run)

    @property
    def tank(self) -> str:
        """The tank the probe hangs in; its own name until that is known."""
        judges = self.follower.chain.judges
        return judges.bench.probe[self.probe].tank if judges else self.probe

    @property
    def closed_t(self) -> float:
        """Up to where all has been judged, on the common time."""
        return self.follower.chain.closed_t + self.offset

    @property
    def seen(self) -> Seen:
        """For the fold over all probes: this run's and those before."""
        runs = [*self._past, (self.follower.chain.watched, self.offset)]
        return Seen(self.probe, self.tank, self.closed_t, runs, self.done)

    def advance(self) -> list[Finding]:
        """Judge the next chunk. Raises LogError, CalibrationError."""
        for chunk in self._chunks:
            found = self.follower.next_part() if chunk is None else self.follower.feed(chunk)
            return [shifted(f, self.offset) for f in found] if self.offset else found
        self._finish()
        return []

    def _finish(self) -> None:
        chain = self.follower.chain
        self.told.dropped += self.follower.dropped
        self.told.messages += chain.refused
        if not chain.has_settings:
            raise LogError(
                f"log of {self.probe}: no bench event in it; expected --bench BENCH beside it"
            )
        if self._runs:
            self._next_run()
        else:
            self.done = True


def _keep_pages() -> None:
    """Let freed arrays stay with the process: to fault their pages in anew at each chunk takes a
    tenth of a replay. This one, freed at once, lifts glibc's thresholds; it touches no page."""
    np.empty(31 << 20, np.uint8)


def _text(run: Run) -> Iterator[bytes | None]:
    """The bytes of a run's parts; None where a part ends."""
    for part in run.parts:
        yield from part.chunks()
        yield None


class Advancing(Protocol):
    """What `replay` asks of a probe."""

    @property
    def closed_t(self) -> float:
        """Up to where all has been judged, on the common time."""

    @property
    def done(self) -> bool:
        """Whether all its runs have been judged."""

    @property
    def seen(self) -> Seen:
        """For the fold over all probes."""

    def advance(self) -> list[Finding]:
        """Further findings, in order."""


def replay(probes: Sequence[Advancing]) -> Iterator[list[Finding]]:
    """Findings of these probes, in order, as they become sure.

    Raises LogError, CalibrationError.
    """
    together = Together()
    while running := [probe for probe in probes if not probe.done]:
        together.take(min(running, key=lambda probe: probe.closed_t).advance())
        if any(probe.closed_t == -math.inf for probe in probes if not probe.done):
            continue  # in which tank it hangs is not known yet
        ready, _ = together.advance([probe.seen for probe in probes])
        if ready:
            yield ready


def opened(
    paths: Sequence[str],
    given: Bench | None,
    bare_probe: str | None = None,
    bare_rate_hz: float | None = None,
) -> tuple[datetime, list[Run]]:
    """The first `started` of these files, and the runs that they hold.

    Raises LogError if a file is no log, or one of a probe that the bench has not.
    """
    runs = reader.runs(paths, bare_probe, bare_rate_hz)
    if given is not None:
        for run in runs:
            if run.probe not in given.probe:
                raise LogError(
                    f"{run.parts[0].path}: probe {run.probe} is not in the bench file; expected"
                    f" one of {', '.join(given.probe)}"
                )
    return min(run.started for run in runs), runs


def open_logs(
    paths: Sequence[str],
    given: Bench | None,
    witness: Witness | None = None,
    bare_probe: str | None = None,
    bare_rate_hz: float | None = None,
) -> list[ProbeReplay]:
    """The probes that these files hold, ready to be replayed.

    Raises LogError if a file is no log, CalibrationError if the bench's standards allow no fit.
    """
    zero, runs = opened(paths, given, bare_probe, bare_rate_hz)
    names = dict.fromkeys(run.probe for run in runs)
    return [
        ProbeReplay(name, [run for run in runs if run.probe == name], zero, given, witness)
        for name in names
    ]

"""A bench moved by hand: recorders on virtual probes, and a clock that the test moves."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from itertools import pairwise
from pathlib import Path

import numpy as np

from drivers.line import Decoder
from drivers.virtual_tank.probe import Probe
from monitor.bench import Bench
from monitor.findings import Finding
from monitor.follow import Follower
from monitor.logbook.writer import LogWriter
from monitor.recorder import Recorder
from monitor.runs import carried_by_last_run, head_of
from monitor.tanks import Seen, Together

STRIDE = 8  # seconds that pass at once where nothing happens: nothing may depend on it


class HandClock:
    """A clock that the test moves."""

    speed = 1.0

    def __init__(self, start: datetime) -> None:
        self.start = start
        self.s = 0.0

    def now_s(self) -> float:
        return self.s

    awake_s = now_s

    def utc(self) -> datetime:
        return self.start + timedelta(seconds=self.s)


@dataclass
class HandBench:
    """Some probes, their recorders, and what was said."""

    folder: Path
    clock: HandClock
    bench: Bench
    probes: dict[str, Probe]  # by the port that they are plugged into
    recorders: dict[str, Recorder] = field(default_factory=dict)
    said: list[Finding] = field(default_factory=list)
    shut: set[str] = field(default_factory=set)  # silent ports
    rinsed: dict[str, float] = field(default_factory=dict)  # port -> salinity of other water, %
    together: Together = field(default_factory=Together)

    def start(self) -> None:
        """A run begins."""
        started = self.clock.utc()
        for name in self.probes:
            carried = carried_by_last_run(self.folder, name, started, self.bench)
            recorder = Recorder(
                name,
                Decoder(self.bench.probe[name]),
                LogWriter(self.folder, name, started, "aday"),
                Follower(name),
                self.clock,
                self.clock.s,
                self._tell,
                lambda text: None,
            )
            recorder.begin(head_of(self.bench, name), carried)
            recorder.link(True)
            self.recorders[name] = recorder

    def _tell(self, found: Sequence[Finding]) -> None:
        self.together.take(found)

    def on(self, seconds: float) -> None:
        """Time passes."""
        left = int(seconds)
        while left > 0:
            step = 1 if self.shut else min(left, STRIDE)
            self._pass(step)
            left -= step

    def _pass(self, seconds: int) -> None:
        """So many seconds of everything; what came in is written and judged at their end."""
        day = self.clock.utc().date()
        first_s = self.clock.s
        self.clock.s += seconds
        for name in self.probes:
            if name not in self.shut:
                for i, lines in enumerate(self._lines(name, first_s, seconds)):
                    self.recorders[name].on_bytes(lines.encode(), first_s + i + 0.75)
        if self.clock.utc().date() > day:
            self.each(lambda recorder: recorder.next_part())
        self.each(lambda recorder: recorder.tick())
        self.listen()

    def _lines(self, name: str, first_s: float, seconds: int) -> list[str]:
        """What a port sends, second by second."""
        probe = self.probes[name]
        edges = [int((first_s + i) * probe.rate_hz) for i in range(seconds + 1)]
        readings = probe.read(edges[0], edges[-1])
        period = readings.period_us
        if name in self.rinsed:
            water = np.full(len(period), self.rinsed[name])
            period = np.round(probe.circuit.period_us(water, readings.temp_c), 1)
        lines = [f"{p:.10g},{c:.2f}\n" for p, c in zip(period, readings.temp_c)]
        return [
            "".join(lines[start - edges[0] : stop - edges[0]]) for start, stop in pairwise(edges)
        ]

    def listen(self) -> None:
        """Take what is sure now."""
        seen = [
            Seen(
                name,
                self.bench.probe[name].tank,
                recorder.follower.chain.closed_t,
                [(recorder.follower.chain.watched, 0.0)],
            )
            for name, recorder in self.recorders.items()
        ]
        self.said += self.together.advance(seen)[0]

    def sleep(self, seconds: float) -> None:
        """The machine sleeps; what the service writes afterwards."""
        day = self.clock.utc().date()
        self.clock.s += seconds
        self.each(lambda recorder: recorder.gap("asleep"))
        if self.clock.utc().date() > day:
            self.each(lambda recorder: recorder.next_part())

    def each(self, do: Callable[[Recorder], object]) -> None:
        """The same for every recorder."""
        for recorder in self.recorders.values():
            do(recorder)

    def end(self) -> None:
        """Close the run."""
        self.each(lambda recorder: recorder.end())
        self.listen()

"""The virtual bench: tanks and probes that run on a clock and speak through pseudo-terminals.

It knows nothing of who reads. Doses and faults act while it runs, on the bench's own time.
"""

from __future__ import annotations

import asyncio
import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal, Protocol

import numpy as np

from drivers.virtual_tank.faults import LONGEST_S, Fault, make
from drivers.virtual_tank.line_out import LineOut, lines
from drivers.virtual_tank.probe import Probe
from drivers.virtual_tank.tank import Pour, Tank

SHORTEST_SLEEP_S = 0.002
MOST_ROWS = 5000  # in one turn: what a stopped process missed beyond this was never sent


class Clock(Protocol):
    """The clock that the bench and its reader share; it may run faster than the host's."""

    speed: float

    def now_s(self) -> float: ...


@dataclass(frozen=True)
class Act:
    """Something that happens on the bench at `at_s`: where (a tank or a probe) and how.

    dose: tank, figures liquid, volume_ml, open_s · fault: probe, figures fault, lasts_s and its
    own · unplug, plug: probe
    """

    at_s: float
    what: Literal["dose", "fault", "unplug", "plug"]
    where: str
    figures: Mapping[str, Any] = field(default_factory=dict)


@dataclass
class _Device:
    probe: Probe
    line: LineOut
    next_row: int = 0


class VirtualBench:
    """Probes by name in tanks by name, served until `run` is cancelled."""

    def __init__(self, clock: Clock, liquids: Mapping[str, float], seed: int = 1) -> None:
        self.tanks: dict[str, Tank] = {}
        self._clock = clock
        self._zero_s = clock.now_s()
        self._liquids = liquids
        self._rng = np.random.default_rng(seed)
        self._devices: dict[str, _Device] = {}

    @property
    def time_s(self) -> float:
        """Time of the bench, 0 when it was made."""
        return self._clock.now_s() - self._zero_s

    def hang(self, name: str, probe: Probe, folder: Path | None) -> str:
        """Hang a probe; gives the path of its port, a link in `folder` that stays the same."""
        line = LineOut(folder / name if folder else None)
        self._devices[name] = _Device(probe, line)
        return line.path

    def dose(self, tank: str, liquid: str, volume_ml: float, open_s: float = 0.0) -> Pour:
        """Pour from now on, evenly over `open_s`. KeyError for a name that is none."""
        poured_s = max(open_s, 1.0)
        self.tanks[tank].forget(self.time_s)  # a bench that runs for weeks stays as small
        return self.tanks[tank].pour(self.time_s, self._liquids[liquid], volume_ml, poured_s)

    def fault(self, probe: str, name: str, lasts_s: float = LONGEST_S, **figures: Any) -> Fault:
        """Break a probe from now on. KeyError or ValueError for a name that is none."""
        broken = self._devices[probe].probe
        now = self.time_s
        made = make(name, now, now + lasts_s, self._rng, least_s=1.05 / broken.rate_hz, **figures)
        broken.faults[:] = [f for f in broken.faults if f.to_s > now] + [made]
        return made

    def mend(self, probe: str) -> None:
        """End all faults of a probe now."""
        for fault in self._devices[probe].probe.faults:
            fault.to_s = min(fault.to_s, self.time_s)

    def unplug(self, probe: str) -> None:
        """Pull the probe's adapter out of the machine."""
        self._devices[probe].line.unplug()

    def plug(self, probe: str) -> None:
        """Put it back."""
        self._devices[probe].line.plug()

    async def run(self) -> None:
        """Serve all probes until cancelled; then their ports are gone."""
        try:
            while True:
                due_s = min((self._serve(d) for d in self._devices.values()), default=math.inf)
                wait_s = min((due_s - self.time_s) / self._clock.speed, 1.0)
                await asyncio.sleep(max(wait_s, SHORTEST_SLEEP_S))
        finally:
            self.close()

    def close(self) -> None:
        """Take all ports away."""
        for device in self._devices.values():
            device.line.unplug()

    def _serve(self, device: _Device) -> float:
        """Send what is due; gives the time of the next reading."""
        probe = device.probe
        due = int(self.time_s * probe.rate_hz) + 1
        first = max(device.next_row, due - MOST_ROWS)
        if due > first:
            device.line.send(lines(probe.read(first, due), probe.tick_us))
            device.next_row = due
        return device.next_row / probe.rate_hz

    async def play(self, acts: Iterable[Act], tell: Callable[[Act], None]) -> None:
        """Carry out a schedule; `tell` hears of each act when it happens, to record it."""
        for act in sorted(acts, key=lambda act: act.at_s):
            while (left_s := act.at_s - self.time_s) > 0:
                await asyncio.sleep(left_s / self._clock.speed)
            self._carry_out(act)
            tell(act)

    def _carry_out(self, act: Act) -> None:
        figures = dict(act.figures)
        if act.what == "dose":
            self.dose(act.where, **figures)
        elif act.what == "fault":
            self.fault(act.where, figures.pop("fault"), **figures)
        elif act.what == "unplug":
            self.unplug(act.where)
        else:
            self.plug(act.where)

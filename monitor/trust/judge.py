"""One probe's judge: which faults are in force, and whether its readings are believed.

Rules:
- A calm second (all readings well inside the gate, no figure repeated too long, nothing in force)
  costs a few comparisons; any other goes through every fault's own judge.
- A fault is said when it begins and again when it ends, with a line a person can check.
- Out of the tank nothing is judged, and what was in force is over. For half a minute after `back`
  the readings count as water that mixes.
- Between gap lost and back silence is the link's.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from monitor import bench
from monitor.blocks import NAN, Second
from monitor.dosing.ledger import Change
from monitor.findings import Finding
from monitor.trust.belief import Belief
from monitor.trust.force import InForce
from monitor.trust.hum import Hum
from monitor.trust.jumps import Jumps
from monitor.trust.level import Judged, Level
from monitor.trust.lodged import ALL, Lodged
from monitor.trust.silence import Short, Silence
from monitor.trust.slow import Creep
from monitor.trust.stuck import Stuck

BUBBLES_WIDEN = 0.25  # of the gate: what bubbles in the gate may hide
OTHER_PROBE_WIDEN = 0.02  # a probe that came back different


class Trust:
    """Faults and belief of one probe."""

    def __init__(
        self, probe: str, settings: bench.Probe, carried: Mapping[str, Any] | None
    ) -> None:
        carried = carried or {}
        self.level = Level(settings, carried.get("level"))
        self.creep = Creep(probe, settings, carried.get("creep"))
        self.usable = False
        self.out = bool(carried.get("out"))
        self.widen = 0.0
        self._doubts = ""
        self._force = InForce(probe, carried.get("faults", ()))
        self._carried = bool(self._force.said) or self.creep.fault is not None
        self._belief = Belief()
        self._jumps = Jumps()
        self._silence = Silence(carried.get("silence"))
        self._short = Short(settings.standards_in_force)
        self._stuck = Stuck()
        self._hum = Hum()
        self._lodged = Lodged(carried.get("lodged_height"))
        self._busy = True

    @property
    def faults(self) -> Mapping[str, Finding]:
        """Those in force, by name."""
        return self._force.said

    @property
    def belief(self) -> str:
        """believed, doubtful or not-believed."""
        return self._belief.word

    @property
    def why(self) -> str:
        """The reason for it."""
        return self._belief.why

    @property
    def since(self) -> float:
        """When it was said."""
        return self._belief.since

    @property
    def doubts(self) -> str:
        """What else makes it doubtful: set by who asks another question, "" for nothing."""
        return self._doubts

    @doubts.setter
    def doubts(self, why: str) -> None:
        self._busy |= why != self._doubts
        self._doubts = why

    @property
    def locked(self) -> bool:
        """Whether a level is believed."""
        return self.level.locked

    @property
    def level_ln(self) -> float:
        """The level believed, ln us."""
        return self.level.m

    def step(self, second: Second, changes: Sequence[Change]) -> list[Finding]:
        """Judge one closed second: findings `fault` and `belief`."""
        level = self.level
        pulses = second.n_rows > second.zeros
        suspected = pulses and self._stuck.suspects(second, level)
        if self._busy or suspected or second.events or not level.calm(second):
            return self._look(second, changes, pulses, suspected)
        level.learn(second)
        self.usable = True
        self._silence.newest = second
        found = self._hear(second) if self._hum.take(second, level.rate_hz) else []
        found += self.creep.step(second, level, changes)
        if found:
            self._sum_up(second, found)
        elif self.widen:
            self.widen = self._widening()
        return found

    def carry(self) -> dict[str, Any]:
        """Faults in force, the baseline, the level, the last pulse."""
        return {
            "level": self.level.carry(),
            "creep": self.creep.carry(),
            "silence": self._silence.carry(),
            "faults": [dict(f) for name, f in self.faults.items() if name != "fouling"],
            "lodged_height": self._lodged.height,
            "out": self.out,
        }

    def _look(
        self, second: Second, changes: Sequence[Change], pulses: bool, suspected: bool
    ) -> list[Finding]:
        """Any second that is not a calm one."""
        found = self._again(second.t) if self._carried else []
        found += self._meet(second, changes)
        if self.out:
            self.usable = False
            self.level.in_gate_ln = NAN
            return found + self.creep.step(second, self.level, changes)
        found += self._silence.judge(second, self.level.rate_hz, self._force)
        if pulses:
            found += self._short.judge(second, self._force)
            suspected = suspected and not self._short.suspects
            found += self._stuck.judge(second, suspected, self.level, self._force)
        judged = self._levelled(second, pulses)
        found += self._jumps.judge(second, judged, self.level, self._hum, self._force)
        if pulses:
            found += self._lodged.judge(second.t, self.level, self._force)
        if self._hum.take(second, self.level.rate_hz):
            found += self._hear(second)
        found += self.creep.step(second, self.level, changes)
        self._sum_up(second, found)
        self.usable = second.n > 0 and self.belief != "not-believed"
        return found

    def _levelled(self, second: Second, pulses: bool) -> list[Judged]:
        """Let the level follow; the readings that can be judged against it now."""
        level = self.level
        if self._force.any_of("short", "stuck"):  # it is not the water that is read
            level.forget()
            self._jumps.forget()
            return []
        if pulses and not self._force.said and level.calm(second):
            level.learn(second)
            return []
        return level.look(second, self._force.any_of("bubbles", "loose-lead"))

    def _sum_up(self, second: Second, found: list[Finding]) -> None:
        """What all that leaves of belief."""
        force, creep = self._force, self.creep
        if creep.fault is not None:  # its evidence grows with what doses tell
            force.said["fouling"] = creep.fault
        else:
            force.said.pop("fouling", None)
        found += self._belief.step(second, force, self.doubts)
        self.widen = self._widening() if self.belief == "doubtful" else 0.0
        self._busy = bool(
            not self.level.locked
            or second.k < self.level.locked_k + ALL
            or force.said.keys() - {"fouling"}
            or self._jumps.last
            or force.blinded
        )

    def _hear(self, second: Second) -> list[Finding]:
        return self._hum.judge(second.t, self.level.after_dose(second.t), self._force)

    def _again(self, t: float) -> list[Finding]:
        """Say once more what was in force in the run before."""
        self._carried = False
        if self.creep.fault is not None:
            self._force.said["fouling"] = self.creep.fault
        return [{**fault, "t": t} for fault in self.faults.values()]

    def _meet(self, second: Second, changes: Sequence[Change]) -> list[Finding]:
        """Doses, the probe lifted and put back, the link lost and found."""
        t = second.t
        found: list[Finding] = []
        if changes:
            self.level.meet(changes, t)
        for event in second.events:
            if event.kind == "out":
                found += self._force.end_all(t, event.time_s)
                self.out = True
                self._anew(t)
            elif event.kind == "back":
                self.out = False
                self._anew(t)
                self.level.stirred(t)
                self._force.blinded_t = t
            elif event.kind == "gap":
                self._anew(t)
                self._silence.link(event.fields.get("link") == "back", t)
        return found

    def _anew(self, t: float) -> None:
        """What was read before tells nothing of what comes."""
        self.level.forget()
        self._jumps.forget()
        self._hum.forget()
        self._silence.restart(t)

    def _widening(self) -> float:
        """Relative standard doubt that the faults in force add to the level."""
        tone = self._hum.tone
        return math.hypot(
            BUBBLES_WIDEN * self.level.gate if "bubbles" in self._force else 0.0,
            tone.amplitude / math.sqrt(2.0) if tone else 0.0,
            self.creep.cost if "fouling" in self._force else 0.0,
            OTHER_PROBE_WIDEN if self.doubts else 0.0,
        )

"""One probe's judge: which faults are in force, and whether its readings are believed.

Rules:
- A calm second (all readings well inside the gate, no figure repeated all through, nothing in
  force) costs a few comparisons; any other goes through every fault's own judge.
- A fault is said when it begins and again when it ends, with a line a person can check.
- Out of the tank nothing is judged. Between gap lost and back silence is the link's.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from monitor import bench
from monitor.blocks import Second
from monitor.dosing.ledger import Change
from monitor.findings import Finding
from monitor.trust import belief, jumps, lodged
from monitor.trust.hum import LEAD_S, TAIL_S, Hum, Tone
from monitor.trust.jumps import Jumps
from monitor.trust.level import Judged, Level
from monitor.trust.lodged import Step
from monitor.trust.silence import Short, Silence
from monitor.trust.slow import Creep
from monitor.trust.stuck import Stuck

ADVICE = {
    "bubbles": "tap the probe or slow the air near it",
    "loose-lead": "check plugs and leads",
    "lodged-bubble": "lift or tap the probe to free it",
    "no-pulses": "check power, lead and that the probe is in the water",
    "short": "look for water in the plug or electrodes that touch",
    "stuck": "restart the microcontroller",
    "hum": "look for a pump or heater near the lead; earth it",
}
DEAFENING = {"stuck", "short", "no-pulses", "loose-lead"}
LEAST_UPS, LEAST_UPS_DOSE, LEAST_UPS_MIXING = 2.0, 3.0, 4.0
BUBBLES_WIDEN = 0.25  # of the gate: what bubbles in the gate may hide


class Trust:
    """Faults and belief of one probe."""

    def __init__(
        self, probe: str, settings: bench.Probe, carried: Mapping[str, Any] | None
    ) -> None:
        carried = carried or {}
        self.probe = probe
        self.level = Level(settings, carried.get("level"))
        self.creep = Creep(probe, settings, carried.get("creep"))
        self.belief = "believed"
        self.why = "no fault is seen"
        self.since = 0.0
        self.usable = False
        self.out = bool(carried.get("out"))
        self.widen = 0.0
        self.doubts = ""  # what else makes it doubtful, set by who asks another question
        self.faults: dict[str, Finding] = {
            each["fault"]: dict(each) for each in carried.get("faults", ())
        }
        self._carried = bool(self.faults) or self.creep.fault is not None
        self._jumps = Jumps()
        self._silence = Silence(carried.get("silence"))
        self._short = Short(settings.standards_in_force)
        self._stuck = Stuck()
        self._hum = Hum()
        self._tone: Tone | None = None
        self._lodged: Step | None = None
        if "lodged-bubble" in self.faults:
            self._lodged = Step(0, carried.get("lodged_height", 0.1), 0.0)
        self._blind_t = -math.inf  # when a blind fault last was in force
        self._blind = ""
        self._said = ""  # belief said last
        self._busy = True

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
        if (
            not self._busy
            and not second.events
            and second.low_us != second.high_us
            and level.calm(second)
        ):
            level.learn(second)
            self.usable = True
            self._silence.newest = second
            self._stuck.calm(second)
            found = self._listen(second) if self._hum.take(second, level.rate_hz) else []
            found += self.creep.step(second, level, changes)
            if found:
                self._keep(found)
                found += self._believe(second)
            return found
        return self._look(second, changes)

    def carry(self) -> dict[str, Any]:
        """Faults in force, the baseline, the level, the last pulse."""
        return {
            "level": self.level.carry(),
            "creep": self.creep.carry(),
            "silence": self._silence.carry(),
            "faults": [dict(f) for name, f in self.faults.items() if name != "fouling"],
            "lodged_height": self._lodged.height if self._lodged else None,
            "out": self.out,
        }

    def _look(self, second: Second, changes: Sequence[Change]) -> list[Finding]:
        """Any second that is not a calm one."""
        found = self._again(second) if self._carried else []
        self._meet(second, changes)
        if self.out:
            self.usable = False
            self.level.in_gate_ln = math.nan
            found += self.creep.step(second, self.level, changes)
            return found + self._believe(second)
        found += self._pulses(second)
        judged: list[Judged] = []
        if "short" in self.faults:
            self.level.forget()
            self._jumps.forget()
        elif second.n_rows > second.zeros:
            noisy = "bubbles" in self.faults or "loose-lead" in self.faults
            if not self.faults and self.level.calm(second):
                self.level.learn(second)
            else:
                judged = self.level.look(second, noisy)
            found += self._stuck_figures(second)
        else:
            self.level.look(second, False)
        for each in judged:
            self._jumps.take(each, self._full_jump(each))
        found += self._jumping(second, judged)
        found += self._lodging(second)
        if self._hum.take(second, self.level.rate_hz):
            found += self._listen(second)
        found += self.creep.step(second, self.level, changes)
        self._keep(found)
        self.usable = second.n > 0
        found += self._believe(second)
        self.usable = self.usable and self.belief != "not-believed"
        self._busy = bool(
            not self.level.locked
            or second.k < self.level.locked_k + lodged.ALL
            or set(self.faults) - {"fouling"}
            or self._jumps.last
            or self._blind
        )
        return found

    def _again(self, second: Second) -> list[Finding]:
        """Say once more what was in force in the run before."""
        self._carried = False
        if "fouling" not in self.faults and self.creep.fault is not None:
            self.faults["fouling"] = self.creep.fault
        return [{**fault, "t": second.t} for fault in self.faults.values()]

    def _meet(self, second: Second, changes: Sequence[Change]) -> None:
        if changes:
            self.level.meet(changes, second.t)
        for event in second.events:
            if event.kind == "out":
                self.out = True
                self._anew(second.t)
            elif event.kind == "back":
                self.out = False
                self._anew(second.t)
            elif event.kind == "gap":
                self._silence.link(event.fields.get("link") == "back", second.t)
                self._anew(second.t)

    def _anew(self, t: float) -> None:
        """What was read before tells nothing of what comes."""
        self.level.forget()
        self._jumps.forget()
        self._hum.forget()
        self._silence.restart(t)

    # each fault: begun, ended

    def _pulses(self, second: Second) -> list[Finding]:
        found: list[Finding] = []
        since = self._silence.step(second, self.level.rate_hz)
        if since is not None and "no-pulses" not in self.faults:
            what = "only zeros" if second.zeros else "silence"
            found.append(self._begin("no-pulses", second.t, since, f"{what} for 4 s and more"))
        elif since is None and "no-pulses" in self.faults and second.n_rows > second.zeros:
            first = float(second.time_s[second.period_us > 0][0])
            found.append(self._end("no-pulses", second.t, first))
        since, ended = self._short.step(second)
        if since is not None and "short" not in self.faults:
            text = f"period {second.median_us:.4g} us, below {self._short.below_us:.4g} us"
            found.append(self._begin("short", second.t, since, f"{text}: the circuit's own"))
        if ended is not None and "short" in self.faults:
            found.append(self._end("short", second.t, ended))
        return found

    def _stuck_figures(self, second: Second) -> list[Finding]:
        run = self._stuck.step(second, self.level)
        if "stuck" in self.faults:
            ended = self._stuck.ended_t
            return [self._end("stuck", second.t, ended)] if ended is not None else []
        if run is None or "short" in self.faults:
            return []
        text = (
            f"{run.n} times {run.period_us:.10g} us in {second.t - run.from_t:.0f} s,"
            f" chance gives at most {run.chance:.0f}"
        )
        return [self._begin("stuck", second.t, run.from_t, text)]

    def _full_jump(self, judged: Judged) -> float:
        if self.level.after_dose(judged.k):
            return max(1.6 * judged.gate, 0.03)
        return 1.3 * judged.gate

    def _jumping(self, second: Second, judged: Sequence[Judged]) -> list[Finding]:
        t = second.t
        recent = self._jumps.recent(t)
        found: list[Finding] = []
        for name in ("bubbles", "loose-lead"):
            if name in self.faults:
                last = self._jumps.last[-1] if self._jumps.last else None
                end_t = last.end_t if last else self.faults[name]["from_t"]
                if t - end_t >= jumps.clear_after_s(list(self._jumps.last)[-20:]):
                    found.append(self._end(name, t, end_t))
                    self._jumps.last.clear()
                    recent = []
        if judged and recent:
            found += self._jumped(t, recent)
        elif not recent and not self.faults:
            self._jumps.last.clear()
        return found

    def _jumped(self, t: float, recent: list[jumps.Jump]) -> list[Finding]:
        if jumps.is_loose(recent):
            if "loose-lead" in self.faults:
                return []
            said = [self._begin("loose-lead", t, recent[0].t, jumps.told(recent, t))]
            if "bubbles" in self.faults:
                ended = self._end("bubbles", t, t)
                said.insert(0, {**ended, "withdrawn": "they jump too far: a loose lead"})
            return said
        if "bubbles" in self.faults or "loose-lead" in self.faults:
            return []
        least = LEAST_UPS
        if not self.level.locked or "hum" in self.faults:
            least = LEAST_UPS_MIXING
        elif self.level.after_dose(t):
            least = LEAST_UPS_DOSE
        if not jumps.is_bubbling(recent, least):
            return []
        if not self._jumps.one_sided(int(t)) or self._hum.tonal():
            return []
        ups = [jump for jump in recent if jump.height > 0]
        return [self._begin("bubbles", t, ups[0].t, jumps.told(recent, t))]

    def _lodging(self, second: Second) -> list[Finding]:
        if second.n_rows == second.zeros:
            return []
        if self._lodged is not None:
            k = lodged.fallen(self.level, second.t, self._lodged.height)
            if k is None:
                return []
            self._lodged = None
            return [self._end("lodged-bubble", second.t, float(k))]
        step = lodged.step_up(self.level, second.t)
        if step is None or self.faults.keys() & {"short", "loose-lead"}:
            return []
        self._lodged = step
        text = (
            f"period {100 * math.expm1(step.height):+.1f} % within 3 s, then"
            f" {100 * step.moved:+.2f} % in 16 s"
        )
        return [self._begin("lodged-bubble", second.t, float(step.k), text)]

    def _listen(self, second: Second) -> list[Finding]:
        tone = self._tone
        if tone is not None:
            if not self._hum.faded(tone):
                return []
            self._tone = None
            if "hum" not in self.faults:
                return []
            return [self._end("hum", second.t, second.t - TAIL_S)]
        if not self._hum.loud or self.faults.keys() & DEAFENING:
            return []
        tone = self._hum.listen(self.level.after_dose(second.t))
        if tone is None:
            return []
        self._tone = tone
        quarters = ", ".join(f"{100 * size:.2f}" for size in tone.quarters)
        text = (
            f"{tone.hz:.3f} Hz, {100 * tone.amplitude:.2f} % of the period; each 20 s {quarters} %"
        )
        return [self._begin("hum", second.t, second.t - LEAD_S, text)]

    # what is said

    def _begin(self, fault: str, t: float, from_t: float, evidence: str) -> Finding:
        said: Finding = {
            "finding": "fault",
            "probe": self.probe,
            "t": t,
            "fault": fault,
            "from_t": min(from_t, t),
            "to_t": None,
            "evidence": f"{evidence}; {ADVICE[fault]}",
        }
        self.faults[fault] = said
        return dict(said)

    def _end(self, fault: str, t: float, to_t: float) -> Finding:
        said = self.faults.pop(fault)
        if fault in belief.BLIND:
            self._blind, self._blind_t = fault, t
        return {**said, "t": t, "to_t": max(to_t, said["from_t"])}

    def _keep(self, found: Sequence[Finding]) -> None:
        """Know of the creep's fault too."""
        for finding in found:
            if finding["fault"] == "fouling":
                if self.creep.fault is not None:  # its evidence grows with what doses tell
                    self.faults["fouling"] = self.creep.fault
                else:
                    self.faults.pop("fouling", None)

    def _believe(self, second: Second) -> list[Finding]:
        t = second.t
        if self._blind and t - self._blind_t >= belief.RECOVERY_S:
            if second.n_rows > second.zeros:
                self._blind = ""
        elif self._blind and second.n_rows == second.zeros:
            self._blind_t = t
        recovering = f"until 12 s after {self._blind}" if self._blind else ""
        word, why = belief.word_of(self.faults, recovering, self.doubts)
        self.widen = self._widening() if word == "doubtful" else 0.0
        if word != self.belief or not self._said:
            self.since = t
        self.belief, self.why = word, why
        if word == self._said:
            return []
        self._said = word
        return [
            {
                "finding": "belief",
                "probe": self.probe,
                "t": t,
                "belief": word,
                "from_t": self.since,
                "why": why,
            }
        ]

    def _widening(self) -> float:
        """Relative standard doubt that the faults in force add to the level."""
        parts = [
            BUBBLES_WIDEN * self.level.gate if "bubbles" in self.faults else 0.0,
            self._tone.amplitude / math.sqrt(2.0) if self._tone else 0.0,
            self.creep.cost if "fouling" in self.faults else 0.0,
            0.02 if self.doubts else 0.0,
        ]
        return math.hypot(*parts)

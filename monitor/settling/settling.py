"""One probe's judge of rest: what begins a change, what it is called, when it is over.

Rules:
- A recorded dose, or a filtered value that leaves the still level, begins a change (`Mixing`).
  A quiet second costs a few Python floats.
- Rest is declared for the change under way; a rest that is lost, by a disturbance or the next
  dose, is said again with its end.
- A dose recorded late is followed from the stored readings, with what was known at its time.
- Readings of a fault that is not believed do not exist: dropped from its beginning on, and the
  change is followed anew from the others. `back`, `water`, the end of such a fault and a gap
  begin the quiet readings anew.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Mapping, Sequence
from typing import Any

from monitor.bench import Tank
from monitor.blocks import NAN, Second
from monitor.calibration import Calibration
from monitor.dosing.ledger import Dose, Struck, Water
from monitor.findings import Finding
from monitor.settling import outlook
from monitor.settling.history import FLICKER, History, Still
from monitor.settling.mixing import SHORTEST_S, Change, Mixing
from monitor.settling.rest import plateau, rested_x
from monitor.settling.verdict import Outcome, likely_reasons
from monitor.trust.judge import Trust

FILTER = 0.3  # share of a second's reading in the filtered value
GAP_S = 60  # without a reading: the quiet readings begin anew
OUTLOOK_S = 5
LEVEL_S = 10  # readings in one block of the still level
LEFT_BANDS, LEFT_NOISES = 3.0, 6.0  # from the still level: a disturbance
REFRESH_S = 60  # noise and doubt are looked at this often
ONSET_S = 5  # a disturbance is followed no sooner after its onset
UNFORESEEN = 4.0  # times the expected scatter: the disturbance went on
SILENT_S = 30  # without a reading the outlook falls silent


class Settling:
    """Rest and outlook of the tank that one probe hangs in."""

    def __init__(
        self,
        probe: str,
        tank: str,
        settings: Tank,
        calibration: Calibration | None,
        temp_u_c: float,
        carried: Mapping[str, Any] | None,
        liquids: Mapping[str, float] | None = None,
    ) -> None:
        self.probe, self.tank = probe, tank
        self.band = settings.rest_band_pct
        self.calibration = calibration
        self.temp_u_c = temp_u_c
        self.liquids = dict(liquids or {})
        self.history = History()
        self.mixing: Mixing | None = None
        self.answered: deque[tuple[Mixing, float]] = deque(maxlen=8)  # at rest, and said when
        self.at_rest: Finding | None = None
        self.outlook: Finding | None = None
        self.shown_pct = NAN
        self.u95_pct = NAN
        self._last_k = -math.inf  # of the last reading
        self._level = NAN  # where the water stands still
        self._bound = math.inf  # how far the filtered value may be from it
        self._blocks: deque[float] = deque(maxlen=4)
        self._sum, self._count = 0.0, 0
        self._refresh_k = -math.inf
        self._widen = 0.0
        self._belief = "believed"
        self._out = False
        self._onset_k: int | None = None  # of a disturbance that is not followed yet
        self._fastest = 0.0  # its fastest 5 s change

    # -- what the other rooms ask ---------------------------------------------------------------

    @property
    def moving(self) -> bool:
        """Whether a dose or a disturbance is under way, not yet at rest."""
        return self.mixing is not None or self._onset_k is not None

    @property
    def heading(self) -> float:
        """+1 or -1: where a recorded, unsettled dose is to move the salinity; else 0."""
        step = self.mixing.step_pct if self.mixing is not None else 0.0
        return math.copysign(1.0, step) if step else 0.0

    def carry(self) -> dict[str, Any]:
        """What the next run needs, in raw figures."""
        return {}

    # -- a second -------------------------------------------------------------------------------

    def step(
        self, second: Second, changes: Sequence[Dose | Struck | Water], trust: Trust
    ) -> list[Finding]:
        """Judge one closed second: findings `rest` and `outlook`."""
        salinity_pct = second.salinity_pct
        if (
            changes
            or self.mixing is not None
            or self._onset_k is not None
            or salinity_pct != salinity_pct
            or not trust.usable
            or trust.belief != self._belief
            or trust.out is not self._out
            or second.k >= self._refresh_k
        ):
            return self._busy(second, changes, trust)
        filtered = self.shown_pct
        filtered += FILTER * (salinity_pct - filtered)
        self.shown_pct = filtered
        k = second.k
        self._last_k = k
        self.history.bins.append((k, salinity_pct, filtered, second.mean_us, second.temp_used_c))
        self._sum += salinity_pct
        self._count += 1
        if self._count == LEVEL_S:
            self._close_block()
        if abs(filtered - self._level) > self._bound:
            return self._disturbed(k)
        return []

    def _busy(
        self, second: Second, changes: Sequence[Dose | Struck | Water], trust: Trust
    ) -> list[Finding]:
        """Any second that is not a calm one."""
        if self.calibration is None:
            return []
        found: list[Finding] = []
        self._believe(second, trust)
        followed = self._read(second, trust)
        for change in changes:
            if isinstance(change, Dose):
                found += self._dosed(change, second)
            elif isinstance(change, Struck):
                self._struck(change.dose)
            else:
                self._watered(second.t)
        if followed and self.mixing is None and self._onset_k is not None:
            self._follow_disturbance(second.k)
        elif followed and self.mixing is None and abs(self.shown_pct - self._level) > self._bound:
            found += self._disturbed(second.k)
        if self.mixing is not None:
            found += self._say(self.mixing, second, trust)
        self._refresh(second, trust)
        return found

    def _believe(self, second: Second, trust: Trust) -> None:
        """Begin anew after what made the readings another's, or none."""
        if trust.belief != self._belief:
            if trust.belief == "not-believed":
                since = min((f["from_t"] for f in trust.faults.values()), default=second.t)
                self.history.forget_from(since - 1.0)
                self._follow_anew()
            elif self._belief == "not-believed":
                self._begin_quiet(second.t)
            self._belief = trust.belief
        if trust.out is not self._out:
            self._out = trust.out
            if not trust.out:
                self._begin_quiet(second.t)
                self._level = NAN
                if self.mixing is not None:
                    self._unforetold(second.t)

    def _read(self, second: Second, trust: Trust) -> bool:
        """Take in the second's reading, where there is one that counts."""
        salinity_pct, k = second.salinity_pct, second.k
        if not trust.usable or trust.out or salinity_pct != salinity_pct:
            if k - self._last_k > LEVEL_S:
                self.shown_pct = NAN
            return False
        if trust.belief == "not-believed":
            return False
        if k - self._last_k > GAP_S:
            self._begin_quiet(float(k))
        filtered = self.shown_pct
        if filtered != filtered:
            filtered = salinity_pct
        filtered += FILTER * (salinity_pct - filtered)
        if self.mixing is not None:
            if not self.mixing.follow(k, salinity_pct, filtered):
                return False
        elif self._onset_k is None:
            self._sum += salinity_pct
            self._count += 1
            if self._count == LEVEL_S:
                self._close_block()
        self._last_k = k
        self.shown_pct = filtered
        self.history.bins.append((k, salinity_pct, filtered, second.mean_us, second.temp_used_c))
        return True

    # -- what begins a change -------------------------------------------------------------------

    def _dosed(self, dose: Dose, second: Second) -> list[Finding]:
        """A dose was recorded, now or late."""
        if not dose.counts:
            return []
        from_t, open_s = dose.time_s, max(dose.open_s, SHORTEST_S)
        lost = self._lost(second.t, min(max(from_t, self._rested_t()), second.t))
        before = self._under_way(from_t)
        filtered = self.history.filtered_at(from_t)
        if before is not None:
            still = self._foreseen_still(before)
            extra = abs(filtered - still.level_pct) if filtered == filtered else 0.0
            change = Change(from_t, open_s, still, dose, extra_pct=extra)
        else:
            quiet = self.history.still(from_t)
            if quiet is not None:
                change = Change(from_t, open_s, quiet, dose)
            else:
                change = self._unknown_start(from_t, open_s, dose)
        self._begin(change)
        return lost

    def _under_way(self, at_t: float) -> Mixing | None:
        """The change that was not at rest yet at that time, by what was known then."""
        mixing = self.mixing
        if mixing is not None:
            slack = 0.0 if mixing.change.dose is not None else 10.0
            if mixing.change.from_t + slack <= at_t:
                return mixing
        for answered, said_t in reversed(self.answered):
            if answered.change.dose is not None and answered.change.from_t <= at_t < said_t:
                return answered
        return None

    def _foreseen_still(self, mixing: Mixing) -> Still:
        level, u = mixing.foreseen()
        still = mixing.change.still
        if not (math.isfinite(level) and math.isfinite(u)):
            level, u = self.shown_pct, mixing.scale
        return Still(level, still.noise_pct, u, still.period_us, still.temp_c)

    def _unknown_start(self, from_t: float, open_s: float, dose: Dose) -> Change:
        """A dose into water that was not seen standing still: no ledger, wide priors."""
        level = self.history.filtered_at(from_t)
        if level != level:
            level = self.shown_pct
        reading = next(iter(reversed(self.history.bins)), (0, NAN, NAN, NAN, NAN))
        noise = self.history.noise([], level)
        still = Still(level, noise, FLICKER * level, reading[3], reading[4])
        landing = dose.landing(level, noise)[0] if level == level else NAN
        size = abs(landing - level) if landing == landing else 10.0 * self.band
        return Change(from_t, open_s, still, dose, ledger=False, extra_pct=size, size_pct=size)

    def _begin(self, change: Change) -> None:
        self._onset_k = None
        self._sum, self._count = 0.0, 0
        self._blocks.clear()
        self.outlook = None
        self.mixing = Mixing(change, self.band)
        self.mixing.catch_up(self.history.since(change.from_t))

    def _disturbed(self, k: int) -> list[Finding]:
        """The filtered value left the still level without a dose."""
        onset = k
        for at, _, filtered, _, _ in reversed(self.history.bins):
            if abs(filtered - self._level) <= self.band or k - at > 300:
                break
            onset = at
        self._onset_k = onset
        self._fastest = 0.0
        self._sum, self._count = 0.0, 0
        self._blocks.clear()
        return self._lost(k + 1.0, float(onset))

    def _follow_disturbance(self, k: int) -> None:
        """Begin the fit once the disturbance slows down."""
        assert self._onset_k is not None
        past = self.history.filtered_at(k + 1.0 - ONSET_S)
        change_pct = abs(self.shown_pct - past) if past == past else math.inf
        if k - self._onset_k < ONSET_S:
            return
        self._fastest = max(self._fastest, change_pct)
        if change_pct < max(0.5 * self._fastest, self.band):
            onset_t = float(self._onset_k)
            self._begin_unrecorded(onset_t, k + 1.0 - onset_t)

    def _begin_unrecorded(self, from_t: float, open_s: float) -> None:
        """Follow a change that nobody recorded from now on."""
        still = self.history.still(from_t)
        if still is None or self._level == self._level:
            level = self._level if self._level == self._level else self.shown_pct
            noise = self.history.noise([], level)
            raw = self.history.bins[-1]
            still = Still(level, noise, FLICKER * level, raw[3], raw[4])
        size = abs(self.shown_pct - still.level_pct)
        self._begin(Change(from_t, open_s, still, None, ledger=False, size_pct=size))

    def _struck(self, dose: Dose) -> None:
        """The dose under way counts as not given: what mixes is a change nobody recorded."""
        mixing = self.mixing
        if mixing is None or mixing.change.dose is None or mixing.change.dose.key != dose.key:
            return
        was = mixing.change
        size = abs(mixing.step_pct)
        self._begin(Change(was.from_t, was.open_s, was.still, None, False, was.extra_pct, size))

    def _watered(self, t: float) -> None:
        """Water that is no dose: what was still is so no more, and where it lands is unknown."""
        self._begin_quiet(t)
        if self.mixing is not None:
            self._unforetold(t)

    def _unforetold(self, t: float) -> None:
        """Follow the change anew from now on, without the ledger; the dose is still answered."""
        assert self.mixing is not None
        was = self.mixing.change
        size = max(abs(self.mixing.step_pct), abs(self.shown_pct - was.still.level_pct), 0.0)
        if size != size:
            size = self.mixing.scale
        level = self.shown_pct if self.shown_pct == self.shown_pct else was.still.level_pct
        still = Still(
            level, was.still.noise_pct, was.still.u_pct, was.still.period_us, was.still.temp_c
        )
        from_t = max(t, was.from_t + was.open_s) - SHORTEST_S
        self._begin(Change(from_t, SHORTEST_S, still, was.dose, False, size, size))

    def _follow_anew(self) -> None:
        """Follow the change under way from the readings that are left."""
        if self.mixing is not None:
            said = self.outlook
            self._begin(self.mixing.change)
            self.outlook = said
        self._onset_k = None

    # -- what is said ---------------------------------------------------------------------------

    def _say(self, mixing: Mixing, second: Second, trust: Trust) -> list[Finding]:
        """Rest, or how things look."""
        k = second.k
        if trust.belief == "not-believed" or trust.out:
            return []
        if mixing.rests and k == self._last_k:
            return [self._declared(mixing, second.t, trust)]
        judgement, fit = mixing.judgement, mixing.fit
        if (
            mixing.change.dose is None
            and judgement is not None
            and fit is not None
            and fit.n >= 10
            and judgement.free.s2 > UNFORESEEN
        ):
            self._begin_unrecorded(k + 1.0 - 10.0, 10.0)
            return []
        due = self.outlook is None or k - self.outlook["t"] + 1 >= OUTLOOK_S
        if not due or k - self._last_k > SILENT_S:
            return []
        said = self._outlook(mixing, second, trust)
        if said is None:
            return []
        self.outlook = said
        return [said]

    def _declared(self, mixing: Mixing, t: float, trust: Trust) -> Finding:
        """Rest: end this change, and keep what it found."""
        judgement = mixing.judgement
        assert judgement is not None
        change = mixing.change
        step, sd = plateau(judgement.free, self.band)
        salinity = change.still.level_pct + step
        u95 = 2.0 * self._doubt(salinity, sd, trust)
        rested_t = min(mixing.start_t + rested_x(judgement, self.band), t)
        finding: Finding = {
            "finding": "rest",
            "probe": self.probe,
            "tank": self.tank,
            "t": t,
            "to_t": None,
            "dose_t": change.dose.time_s if change.dose is not None else None,
            "rested_t": max(rested_t, change.from_t),
            "salinity_pct": salinity,
            "u95_pct": u95,
            **self._verdict(mixing, salinity, sd, trust),
        }
        if trust.belief == "doubtful":
            finding["doubtful"] = True
        self.at_rest = finding
        self.answered.append((mixing, t))
        self.mixing = None
        self.outlook = None
        self._level = salinity
        self._bound = self._left()
        self._blocks.extend((salinity, salinity))
        self.history.quiet_from(t, t - 10.0)
        return finding

    def _verdict(self, mixing: Mixing, salinity: float, sd: float, trust: Trust) -> Finding:
        change = mixing.change
        if change.dose is None or mixing.predicted is None:
            return {"predicted_pct": None, "predicted_u95_pct": None, "verdict": "no-prediction"}
        landing, _ = mixing.predicted
        sd_step = mixing.expected[0].sd_pct
        last = self.history.since(self._last_k - 9.0)
        to_us = sum(reading[3] for reading in last) / len(last)
        to_c = sum(reading[4] for reading in last) / len(last)
        still = change.still
        assert self.calibration is not None
        u_step = self.calibration.u_step_pct(
            still.period_us, self._temp(still.temp_c), to_us, self._temp(to_c), self.temp_u_c
        )
        u = math.sqrt(sd**2 + sd_step**2 + u_step**2 + (trust.widen * salinity) ** 2)
        outcome = Outcome(change.dose, still.level_pct, still.u_pct, salinity, landing, u)
        said: Finding = {
            "predicted_pct": landing,
            "predicted_u95_pct": 2.0 * sd_step,
            "verdict": "agrees" if outcome.agrees else "disagrees",
        }
        if not outcome.agrees:
            said["why"] = likely_reasons(outcome, self.liquids)
        return said

    def _outlook(self, mixing: Mixing, second: Second, trust: Trust) -> Finding | None:
        landing, sd = mixing.landing()
        if landing != landing:
            return None
        change = mixing.change
        if mixing.judgement is not None:
            rest_in_s, u95_s = outlook.rest_in(mixing.judgement, self.band)
            rest_in_s = max(rest_in_s - (second.k - self._last_k), 0.0)
        else:
            to_run_s = max(change.from_t + change.open_s - second.t, 0.0)
            rest_in_s, u95_s = outlook.rest_in_before(to_run_s, mixing.step_pct, self.band)
        finding: Finding = {
            "finding": "outlook",
            "probe": self.probe,
            "tank": self.tank,
            "t": second.t,
            "dose_t": change.dose.time_s if change.dose is not None else None,
            "salinity_pct": landing,
            "u95_pct": 2.0 * self._doubt(landing, sd, trust),
            "rest_in_s": rest_in_s,
            "rest_in_u95_s": u95_s,
        }
        if trust.belief == "doubtful":
            finding["doubtful"] = True
        return finding

    def _lost(self, t: float, to_t: float) -> list[Finding]:
        """The rest in force is over."""
        if self.at_rest is None:
            return []
        ended = {**self.at_rest, "t": t, "to_t": to_t}
        self.at_rest = None
        return [ended]

    def _rested_t(self) -> float:
        return self.at_rest["rested_t"] if self.at_rest is not None else -math.inf

    # -- level, noise, doubt --------------------------------------------------------------------

    def _begin_quiet(self, t: float) -> None:
        self.history.quiet_from(t, t)
        self._sum, self._count = 0.0, 0
        self._blocks.clear()

    def _close_block(self) -> None:
        """Ten more quiet readings: the still level follows, some seconds behind."""
        self._blocks.append(self._sum / self._count)
        self._sum, self._count = 0.0, 0
        if len(self._blocks) > 1:
            older = list(self._blocks)[:-1]
            self._level = sum(older) / len(older)
            if self._bound == math.inf:
                self._bound = self._left()

    def _left(self) -> float:
        noise = self.history.noise_pct
        if noise != noise:
            noise = 5e-4 * self._level
        return max(LEFT_BANDS * self.band, LEFT_NOISES * noise)

    def _refresh(self, second: Second, trust: Trust) -> None:
        """Look at noise and doubt again, now and then."""
        k = second.k
        if k < self._refresh_k and trust.widen == self._widen and self.u95_pct == self.u95_pct:
            return
        self._refresh_k = k + REFRESH_S
        self._widen = trust.widen
        if self.shown_pct != self.shown_pct or not self.history.bins:
            self.u95_pct = NAN
            return
        if self.mixing is None and self._onset_k is None:
            self.history.still(second.t)
            self._bound = self._left() if self._level == self._level else math.inf
        noise = self.history.noise_pct
        noise = 5e-4 * self.shown_pct if noise != noise else noise
        self.u95_pct = 2.0 * self._doubt(
            self.shown_pct, noise * math.sqrt(FILTER / (2.0 - FILTER)), trust
        )

    def _doubt(self, salinity_pct: float, sd: float, trust: Trust) -> float:
        """Standard doubt of a salinity: its own, calibration and temperature, and the probe's."""
        assert self.calibration is not None
        _, _, _, period_us, temp_c = self.history.bins[-1]
        u = self.calibration.u_pct(period_us, self._temp(temp_c), self.temp_u_c)
        return math.sqrt(sd**2 + u**2 + (trust.widen * salinity_pct) ** 2)

    def _temp(self, temp_c: float) -> float:
        assert self.calibration is not None
        return temp_c if temp_c == temp_c else self.calibration.temp_c

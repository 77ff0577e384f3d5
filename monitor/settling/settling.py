"""One probe's judge of rest: what begins a change, what is said of it, when it is over.

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
from monitor.settling import begin, carry
from monitor.settling.disturbance import Disturbance
from monitor.settling.doubt import Doubt
from monitor.settling.history import Bin, History
from monitor.settling.level import Level
from monitor.settling.mixing import Change, Mixing
from monitor.settling.records import Records
from monitor.settling.sieve import Sieve, Turn
from monitor.trust.judge import Trust

FILTER = 0.3  # share of a second's reading in the filtered value
HELD_S = 10  # without a reading the filtered value is shown this long
GAP_S = 60  # without a reading: the quiet readings begin anew
OUTLOOK_S = 5.0
REFRESH_S = 300  # noise and doubt are looked at this often, and after each rest
UNFORESEEN, UNFORESEEN_N = 4.0, 10  # times the expected scatter: the disturbance went on
SILENT_S = 30  # without a reading the outlook falls silent
SETTLED_S = 10.0  # before a rest was declared the water stood still for so long

Changes = Sequence[Dose | Struck | Water]


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
        temp_c: float | None = None,
    ) -> None:
        """Begin clean plus what was carried.

        Parameters
        ----------
        temp_u_c : C, standard uncertainty of the thermometer's offset
        liquids : salinity (%) of each liquid at hand, to name the one that was mistaken
        temp_c : C, taken where there is no thermometer; the standards' mean if None
        """
        self.band = settings.rest_band_pct
        self.doubt = Doubt(calibration, temp_u_c, temp_c) if calibration is not None else None
        self.records = Records(probe, tank, self.doubt, liquids or {}) if self.doubt else None
        self.sieve = Sieve(self.doubt) if self.doubt else None
        self.liquids = liquids or {}
        self.history = History()
        self.level = Level(self.band)
        self.mixing: Mixing | None = None
        self.answered: deque[tuple[Mixing, float]] = deque(maxlen=8)  # at rest, and said when
        self.at_rest: Finding | None = None
        self.outlook: Finding | None = None
        self.shown_pct = NAN
        self.u95_pct = NAN
        self._last_k = -math.inf  # of the last reading
        self._refresh_k = -math.inf
        self._calm = True  # nothing to mind
        self._widen = 0.0
        self.disturbance: Disturbance | None = None  # one that is not followed yet
        if carried and self.doubt is not None:
            carry.resumed(self, carried, self.doubt)

    @property
    def moving(self) -> bool:
        """Whether a dose or a disturbance is under way, not yet at rest."""
        return self.mixing is not None or self.disturbance is not None

    @property
    def heading(self) -> float:
        """+1 or -1: where a recorded, unsettled dose is to move the salinity; else 0."""
        step = self.mixing.step_pct if self.mixing is not None else 0.0
        return math.copysign(1.0, step) if step else 0.0

    def carry(self) -> dict[str, Any]:
        """What the next run needs, in raw figures."""
        return carry.packed(self) if self.doubt is not None else {}

    def remember(self, reading: Bin) -> None:
        """Take in a reading of the run before, its filtered value yet unknown."""
        k, salinity_pct, _, period_us, temp_c = reading
        filtered = self.shown_pct if self.shown_pct == self.shown_pct else salinity_pct
        filtered += FILTER * (salinity_pct - filtered)
        self.shown_pct = filtered
        self._last_k = k
        self.history.bins.append((k, salinity_pct, filtered, period_us, temp_c))
        self.level.add(salinity_pct)

    def resume(self, change: Change) -> None:
        """Go on with the change that was under way in the run before."""
        self.level.forget()
        self._begin(change)

    def step(self, second: Second, changes: Changes, trust: Trust) -> list[Finding]:
        """Judge one closed second: findings `rest` and `outlook`."""
        salinity_pct = second.salinity_pct
        k = second.k
        if (
            changes
            or self.mixing is not None
            or self.disturbance is not None
            or salinity_pct != salinity_pct
            or self.shown_pct != self.shown_pct
            or not trust.usable
            or not self._calm
            or trust.belief != "believed"
            or trust.out
            or k >= self._refresh_k
        ):
            return self._busy(second, changes, trust)
        filtered = self.shown_pct
        filtered += FILTER * (salinity_pct - filtered)
        self.shown_pct = filtered
        self._last_k = k
        self.history.bins.append((k, salinity_pct, filtered, second.mean_us, second.temp_used_c))
        self.level.add(salinity_pct)
        return self._disturbed(second) if self.level.left(filtered) else []

    def _busy(self, second: Second, changes: Changes, trust: Trust) -> list[Finding]:
        """Any second that is not a calm one."""
        if self.records is None or self.sieve is None:
            return []
        self._mind(self.sieve.turn(second, trust), second.t)
        self._calm = self.sieve.calm
        read = self._read(second, *self.sieve.reading(second, trust))
        found: list[Finding] = []
        for change in changes:
            if isinstance(change, Dose):
                found += self._dosed(change, second.t)
            elif isinstance(change, Struck):
                self._struck(change.dose)
            else:
                self._watered(second.t)
        if read and self.mixing is None:
            seen = self.disturbance
            if seen is not None:
                if seen.slows(second.t, self.history, self.shown_pct):
                    self._begin_unrecorded(seen.onset_t, second.t - seen.onset_t)
            elif self.level.left(self.shown_pct):
                found += self._disturbed(second)
        if self.mixing is not None:
            found += self._say(self.mixing, second, trust)
        self._refresh(second, trust)
        return found

    # What counts as a reading

    def _mind(self, turn: Turn, t: float) -> None:
        """Begin anew after what made the readings another's, or none."""
        if turn.bad_from_t is not None:
            self.history.forget_from(turn.bad_from_t)
            self.shown_pct = self.history.bins[-1][2] if self.history.bins else NAN
            if self.mixing is not None:
                said = self.outlook
                self._begin(self.mixing.change)
                self.outlook = said
        if turn.quiet:
            self._begin_quiet(t)
        if turn.back:
            self.level.forget()
            self._follow_unforetold(t)

    def _read(self, second: Second, salinity_pct: float, period_us: float) -> bool:
        """Take in the second's reading, where there is one that counts."""
        k = second.k
        if salinity_pct != salinity_pct:
            if k - self._last_k > HELD_S:
                self.shown_pct = NAN
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
        elif self.disturbance is None:
            self.level.add(salinity_pct)
        self._last_k = k
        self.shown_pct = filtered
        self.history.bins.append((k, salinity_pct, filtered, period_us, second.temp_used_c))
        return True

    # What begins a change

    def _dosed(self, dose: Dose, t: float) -> list[Finding]:
        """A dose was recorded, now or late."""
        if not dose.counts or self.doubt is None:
            return []
        bins = self.history.bins
        common = self.doubt.common(bins[-1], self._widen) if bins else 0.0
        met_in_rest = self.at_rest is not None and dose.time_s >= self.at_rest["t"]
        lost = self._lost(t, min(dose.time_s, t) if met_in_rest else t)
        self._begin(begin.dosed(dose, self.history, self.mixing, self.answered, common))
        return lost

    def _disturbed(self, second: Second) -> list[Finding]:
        """The filtered value left the still level without a dose."""
        self.disturbance = Disturbance(second.t, self.history, self.level.pct, self.band)
        self.level.restart()
        return self._lost(second.t, self.disturbance.onset_t)

    def _begin_unrecorded(self, from_t: float, open_s: float) -> None:
        self._begin(begin.unrecorded(from_t, open_s, self.level.pct, self.shown_pct, self.history))

    def _begin(self, change: Change) -> None:
        self.disturbance = None
        self.level.restart()
        self.outlook = None
        self.mixing = Mixing(change, self.band, self.liquids)
        self.mixing.catch_up(self.history.since(change.from_t))

    def _struck(self, dose: Dose) -> None:
        """The dose under way counts as not given: what mixes is a change nobody recorded."""
        mixing = self.mixing
        if mixing is None or mixing.change.dose is None or mixing.change.dose.key != dose.key:
            return
        self._begin(begin.struck(mixing.change, mixing.step_pct))

    def _watered(self, t: float) -> None:
        """Water that is no dose: what was still is so no more, where it lands is unknown."""
        self._begin_quiet(t)
        self._follow_unforetold(t)

    def _follow_unforetold(self, t: float) -> None:
        """From now on without the ledger; the dose is still answered."""
        if self.mixing is not None:
            self._begin(begin.unforetold(self.mixing, t, self.shown_pct))

    def _begin_quiet(self, t: float) -> None:
        self.history.quiet_from(t, t)
        self.level.restart()

    # What is said

    def _say(self, mixing: Mixing, second: Second, trust: Trust) -> list[Finding]:
        """Rest, or how things look."""
        assert self.records is not None
        if trust.belief == "not-believed" or trust.out or second.k - self._last_k > SILENT_S:
            return []
        if mixing.rests and second.k == self._last_k:
            return [self._rest(mixing, second.t, trust)]
        if mixing.change.dose is None and mixing.went_on(UNFORESEEN, UNFORESEEN_N):
            self._begin_unrecorded(second.t - UNFORESEEN_N, float(UNFORESEEN_N))
            return []
        if self.outlook is not None and second.t - self.outlook["t"] < OUTLOOK_S:
            return []
        self.outlook = self.records.outlook(mixing, second.t, self.history, trust) or self.outlook
        said = self.outlook is not None and self.outlook["t"] == second.t
        return [self.outlook] if said and self.outlook is not None else []

    def _rest(self, mixing: Mixing, t: float, trust: Trust) -> Finding:
        """Rest: end this change, and keep what it found."""
        assert self.records is not None
        self.at_rest = self.records.rest(mixing, t, self.history, trust)
        self.answered.append((mixing, t))
        self.mixing = None
        self.outlook = None
        self._refresh_k = -math.inf
        self.level.stands_at(self.at_rest["salinity_pct"])
        self.history.quiet_from(t, t - SETTLED_S)
        return self.at_rest

    def _lost(self, t: float, to_t: float) -> list[Finding]:
        """The rest in force is over."""
        if self.at_rest is None:
            return []
        ended = {**self.at_rest, "t": t, "to_t": to_t}
        self.at_rest = None
        return [ended]

    def _refresh(self, second: Second, trust: Trust) -> None:
        """Look at noise and doubt again, now and then."""
        assert self.doubt is not None
        known = self.u95_pct == self.u95_pct
        if second.k < self._refresh_k and trust.widen == self._widen and known:
            return
        self._refresh_k = second.k + REFRESH_S
        self._widen = trust.widen
        if self.shown_pct != self.shown_pct or not self.history.bins:
            self.u95_pct = NAN
            return
        if not self.moving:
            self.history.still(second.t)
        noise = self.history.noise_pct
        noise = 5e-4 * self.shown_pct if noise != noise else noise
        self.level.widen(noise)
        sd = noise * math.sqrt(FILTER / (2.0 - FILTER))
        self.u95_pct = 2.0 * self.doubt.level_pct(self.history.bins[-1], sd, trust.widen)

"""A change under way: one dose, or a disturbance nobody recorded, from its start to rest."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

from monitor.dosing.ledger import Dose
from monitor.settling.fit import FEWEST, Fit
from monitor.settling.history import Bin, Still
from monitor.settling.models import SETTLE_S
from monitor.settling.rest import NEEDED, Expected, Foretold, Judgement, judge

LEDGER_ODDS = 20.0  # for the recorded dose, against anything else having gone in
OTHER_ODDS = 1.0  # for the same volume of another liquid
LEDGER_ERROR = 5e-4  # of the step: what the mass balance leaves out
SOONEST = 6  # readings before rest may be called
NEAR_BANDS = 1.2  # the filtered value has to stay this near to the landing
NEAR_S, NEAR_ALONE_S = 8, 30  # for so long, with the ledger and without it
PASSING_BANDS = 0.7  # it may not have moved by more meanwhile
FLAT_SURE, FLAT_BANDS, FLAT_S = 0.95, 0.5, 60  # standing still elsewhere than the ledger says
UNLIKELY = 0.3  # below this chance of rest every third reading is judged
SHORTEST_S = 0.5  # a dose poured at once
UNKNOWN_BANDS = 10.0  # size of a change that nothing tells anything about


@dataclass(frozen=True)
class Change:
    """What set the tank in motion, and from where."""

    from_t: float
    open_s: float
    still: Still  # the water before; of a dose overtaken: where that would have landed
    dose: Dose | None = None
    ledger: bool = True  # the dose's mass balance counts
    extra_pct: float = 0.0  # how far from rest the tank was when this began
    size_pct: float = 0.0  # least size of the step, where the ledger does not tell
    common: float = 0.0  # relative standard doubt that all readings have in common

    def predicted(self, liquid_pct: float | None = None) -> tuple[float, float] | None:
        """Where the mass balance lands: salinity and its standard doubt as against a reading.

        Where all readings are too high by one factor, so are the water before and the landing
        as read, but not what the dose brought in. `liquid_pct`: had it been another liquid.
        """
        if self.dose is None or not self.ledger:
            return None
        dose = self.dose if liquid_pct is None else replace(self.dose, liquid_pct=liquid_pct)
        level, u_level = self.still.level_pct, self.still.u_pct
        landing, u = dose.landing(level, u_level)
        raised = dose.landing(level * (1.0 + self.common), u_level)[0]
        u = math.hypot(u, self.common * landing - (raised - landing))
        return (landing, u) if math.isfinite(landing) and math.isfinite(u) else None


class Mixing:
    """Follows one change. Times are seconds of the run, the fit's x counts from `start_t`."""

    def __init__(self, change: Change, band_pct: float, liquids: Mapping[str, float]) -> None:
        """`liquids`: salinity (%) of each at hand, one of which may have been mistaken."""
        self.change = change
        self.band = band_pct
        self.start_t = change.from_t + change.open_s + SETTLE_S
        self.level_pct = change.still.level_pct  # what the fit counts from; NaN until a reading
        self.predicted = change.predicted()
        self.expected = self._expected(liquids)
        self.step_pct = self.expected[0].step_pct if self.expected else 0.0
        self.scale = max(3.0 * band_pct, abs(self.step_pct), change.size_pct)
        self.extra = change.extra_pct
        if self.level_pct != self.level_pct or not (self.expected or change.size_pct):
            self.scale = UNKNOWN_BANDS * band_pct
        if self.level_pct != self.level_pct:
            self.extra = self.scale
        self.foretold = Foretold(self.expected, self.scale)
        self.fit: Fit | None = None
        self.judgement: Judgement | None = None
        self.filtered: deque[tuple[int, float]] = deque(maxlen=FLAT_S + 1)
        self.ready = 0  # judgements in a row that say rest

    def follow(self, k: int, salinity_pct: float, filtered_pct: float) -> bool:
        """Take in the second k; False if its reading is a stray one, to be left out everywhere."""
        x = k + 0.5 - self.start_t
        if x < 0.0:
            self.filtered.append((k, filtered_pct))
            return True
        if self.fit is None:
            self.fit = self._fit(salinity_pct)
        if not self.fit.add(x, salinity_pct - self.level_pct):
            return False
        self.filtered.append((k, filtered_pct))
        n = self.fit.n
        doubtful = self.judgement is None or self.judgement.p_rest <= UNLIKELY
        if n >= FEWEST and (not doubtful or n % 3 == 0):
            self._judge(k)
        return True

    def catch_up(self, bins: Iterable[Bin]) -> None:
        """Follow readings that were taken before the change was known."""
        for k, salinity_pct, filtered_pct, _, _ in bins:
            self.follow(k, salinity_pct, filtered_pct)

    @property
    def rests(self) -> bool:
        """Whether rest can be declared."""
        return self.ready >= NEEDED

    def landing(self) -> tuple[float, float]:
        """Where it will land as things stand: salinity and standard deviation."""
        if self.judgement is not None:
            step, sd = self.judgement.landing
            return self.level_pct + step, sd
        if self.predicted is not None:
            return self.predicted[0], self.expected[0].sd_pct
        return math.nan, math.nan

    def foreseen(self) -> tuple[float, float]:
        """Where a next dose has to take it to have been heading: salinity and its doubt."""
        if self.predicted is not None and (self.judgement is None or self.judgement.p_told >= 0.5):
            return self.predicted[0], self.predicted[1]
        return self.landing()

    def went_on(self, times: float, fewest: int) -> bool:
        """Whether the readings scatter so much that what began the change goes on."""
        fit = self.fit
        return fit is not None and fit.n >= fewest and fit.s2 > times

    def _expected(self, liquids: Mapping[str, float]) -> tuple[Expected, ...]:
        """The step of the recorded dose first, then those of the other liquids."""
        change = self.change
        if self.predicted is None or change.dose is None:
            return ()
        own = change.dose.liquid
        others = [change.predicted(pct) for name, pct in liquids.items() if name != own]
        steps = []
        for landing, odds in [(self.predicted, LEDGER_ODDS), *((o, OTHER_ODDS) for o in others)]:
            if landing is not None:
                step = landing[0] - change.still.level_pct
                steps.append(Expected(step, math.hypot(landing[1], LEDGER_ERROR * step), odds))
        return tuple(steps)

    def _fit(self, salinity_pct: float) -> Fit:
        still = self.change.still
        if self.level_pct != self.level_pct:
            self.level_pct = salinity_pct
            still = Still(salinity_pct, 5e-4 * salinity_pct, 0.0, math.nan, math.nan)
        return Fit(self.change.open_s, self.scale, self.extra, still.floor_var)

    def _judge(self, k: int) -> None:
        assert self.fit is not None
        self.judgement = judge(self.fit.models(), self.foretold, self.band)
        self.ready = self.ready + 1 if self._says_rest(self.judgement, k) else 0

    def _says_rest(self, said: Judgement, k: int) -> bool:
        assert self.fit is not None
        if self.fit.n < SOONEST:
            return False
        if said.p_told > 0.5:
            sure = said.p_rest > 0.93 and said.p_rest_free > 0.15
            if sure and self._stayed(said.landing[0], k, NEAR_S) and self._slow(k):
                return True
            flat = said.p_rest_free > FLAT_SURE
            return flat and self._stayed(said.landing_free[0], k, FLAT_S, FLAT_BANDS)
        return said.p_rest_free > 0.8 and self._stayed(said.landing_free[0], k, NEAR_ALONE_S)

    def _slow(self, k: int) -> bool:
        """Whether the filtered value is not just passing by."""
        before = next(f for at, f in self.filtered if at > k - NEAR_S)
        return abs(self.filtered[-1][1] - before) <= PASSING_BANDS * self.band

    def _stayed(self, step_pct: float, k: int, for_s: int, bands: float = NEAR_BANDS) -> bool:
        """Whether the filtered value was near the landing for so long."""
        landing = self.level_pct + step_pct
        bound = bands * self.band
        if self.filtered[0][0] > k - for_s and len(self.filtered) <= FLAT_S:
            return False
        return all(abs(f - landing) <= bound for at, f in self.filtered if at > k - for_s)

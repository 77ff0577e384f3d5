"""Doses nobody recorded, records without a dose, the same dose twice, a dose that does not rest.

- `unrecorded-dose`: rest came after a step that no record explains.
- `no-step`: 60 s after its end a recorded dose has moved nothing.
- `entered-twice`: the same dose again within two minutes.
- `not-at-rest`: no rest after 30 min, or 20 times the open time where that is longer.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Sequence

from monitor.bench import Bench
from monitor.blocks import Second
from monitor.dosing.balance import volume_for
from monitor.dosing.ledger import Change, Dose, Ledger, Struck, Water
from monitor.findings import Finding
from monitor.notices.notice import Open
from monitor.settling import Settling
from monitor.trust.judge import Trust

TWICE_S, TWICE_SHARE = 120.0, 0.02
STEP_WAIT_S, STEP_SEEN = 60.0, 0.15  # share of the expected step below which nothing moved
STEP_BANDS, STEP_DOUBTS = 4.0, 3.0  # an expected step worth asking about
REST_S, REST_OPENS = 1800.0, 20.0
UNRECORDED_BANDS = 2.0
LARGEST = 0.5  # of the tank's volume: more is no dose but other water (a lift, a change)
NEAR_RECORD_S = 180.0  # a record so near to an unrecorded step is that step's
PAST_S = 1200


class DoseNotices:
    """What is to be asked about the doses of one probe's tank."""

    def __init__(self, open_: Open, bench: Bench, tank: str) -> None:
        self._open = open_
        self._settings = bench.tank[tank]
        self._liquids = {name: liquid.salinity_pct for name, liquid in bench.liquid.items()}
        self._past: deque[tuple[float, float]] = deque(maxlen=PAST_S)  # t, shown
        self._awaited: Dose | None = None  # no rest yet
        self._unmoved: tuple[Dose, float, float] | None = None  # dose, before, step expected
        self._excused_t = -math.inf  # out, back, water or a strike: steps since are explained
        self._rested: Finding | None = None

    @property
    def idle(self) -> bool:
        """Whether a quiet second can tell nothing new."""
        return self._awaited is None and self._unmoved is None

    def remember(self, t: float, shown_pct: float) -> None:
        """Keep what was shown, every second."""
        self._past.append((t, shown_pct))

    def step(
        self,
        second: Second,
        changes: Sequence[Change],
        trust: Trust,
        settling: Settling,
        ledger: Ledger,
    ) -> list[Finding]:
        """One closed second that is not a quiet one."""
        t = second.t
        found: list[Finding] = []
        for event in second.events:
            if event.kind in ("out", "back", "gap", "bench", "calibration"):
                self._excused_t = t
        for change in changes:
            if isinstance(change, Dose):
                found += self._dosed(change, t, ledger)
            elif isinstance(change, Struck):
                found += self._struck(change.dose, t)
            elif isinstance(change, Water):
                self._excused_t = t
        rest = settling.at_rest
        if rest is not None and rest is not self._rested:
            found += self._at_rest(rest, t, settling, trust, ledger)
        self._rested = rest
        return found + self._moved(t, trust, settling) + self._late(t, trust, settling)

    def _dosed(self, dose: Dose, t: float, ledger: Ledger) -> list[Finding]:
        found: list[Finding] = []
        for said in self._open.find("unrecorded-dose"):
            if abs(said["from_t"] - dose.time_s) < NEAR_RECORD_S:
                found += self._open.close(t, "unrecorded-dose", said["from_t"])
        twins = [
            each
            for each in ledger.doses
            if each.key != dose.key
            and each.liquid == dose.liquid
            and abs(each.time_s - dose.time_s) <= TWICE_S
            and abs(each.volume_ml - dose.volume_ml) <= TWICE_SHARE * dose.volume_ml
        ]
        if twins:
            text = (
                f"{dose.volume_ml:g} mL of {dose.liquid} stands twice within"
                f" {abs(twins[-1].time_s - dose.time_s):.0f} s: was it given twice? strike one"
                " out if not"
            )
            found += self._open.say(t, "entered-twice", dose.time_s, dose.volume_ml, text)
        found += self._open.close(t, "not-at-rest") + self._open.close(t, "no-step")
        self._awaited = dose if dose.counts else None
        before = self._before(dose.time_s)
        expected = dose.landing(before, 0.0)[0] - before
        self._unmoved = (dose, before, expected) if math.isfinite(expected) else None
        return found

    def _struck(self, dose: Dose, t: float) -> list[Finding]:
        self._excused_t = t
        found: list[Finding] = []
        for what in ("entered-twice", "no-step", "not-at-rest"):
            found += self._open.close(t, what)
        if self._awaited is not None and self._awaited.key == dose.key:
            self._awaited = self._unmoved = None
        return found

    def _before(self, t: float) -> float:
        known = [shown for when, shown in self._past if when <= t and shown == shown]
        return sum(known[-10:]) / len(known[-10:]) if known else math.nan

    def _moved(self, t: float, trust: Trust, settling: Settling) -> list[Finding]:
        """Has the recorded dose moved anything?"""
        if self._unmoved is None or not trust.usable:
            return []
        dose, before, expected = self._unmoved
        shown = settling.shown_pct
        if shown != shown or t < dose.end_s + STEP_WAIT_S:
            return []
        if abs(shown - before) > 0.5 * abs(expected):
            self._unmoved = None
            return self._open.close(t, "no-step")
        worth = max(STEP_BANDS * self._settings.rest_band_pct, 0.05 * settling.u95_pct)
        if abs(expected) < worth or t > dose.end_s + 2 * STEP_WAIT_S or self._open.find("no-step"):
            return []
        if abs(shown - before) > STEP_SEEN * abs(expected):
            return []
        text = (
            f"{dose.volume_ml:g} mL of {dose.liquid} should have moved the tank by"
            f" {expected:+.4f} %, it moved by {shown - before:+.4f} %: valve shut, bottle empty?"
        )
        return self._open.say(t, "no-step", dose.time_s, shown - before, text)

    def _late(self, t: float, trust: Trust, settling: Settling) -> list[Finding]:
        """Has the dose been mixing for too long?"""
        dose = self._awaited
        if dose is None or t < dose.end_s + max(REST_S, REST_OPENS * dose.open_s):
            return []
        self._awaited = None
        if trust.out:
            why = "the probe is out of the tank"
        elif trust.belief == "not-believed":
            why = f"the probe is not believed: {trust.why}"
        elif settling.shown_pct != settling.shown_pct:
            why = "there are no readings"
        else:
            past = self._before(t - 60.0)
            why = f"still moving {settling.shown_pct - past:+.4f} %/min"
        waited = (t - dose.time_s) / 60.0
        text = f"not at rest {waited:.0f} min after {dose.volume_ml:g} mL of {dose.liquid}: {why}"
        return self._open.say(t, "not-at-rest", dose.time_s, waited, text)

    def _at_rest(
        self, rest: Finding, t: float, settling: Settling, trust: Trust, ledger: Ledger
    ) -> list[Finding]:
        self._awaited = None
        found = self._open.close(t, "not-at-rest")
        if rest["dose_t"] is not None or not settling.answered or trust.belief != "believed":
            return found
        change = settling.answered[-1][0].change
        before, after = change.still.level_pct, rest["salinity_pct"]
        step = after - before
        if change.dose is not None or change.from_t <= self._excused_t + NEAR_RECORD_S:
            return found
        if not abs(step) >= UNRECORDED_BANDS * self._settings.rest_band_pct:
            return found
        liquid, volume = self._likely(before, after, ledger.tank_ml)
        if volume > LARGEST * ledger.tank_ml:
            return found
        like = f", like {volume:.3g} mL of {liquid}" if liquid else ""
        text = (
            f"a step of {step:+.4f} % that nobody recorded{like}: record it with its time if it"
            " was a dose"
        )
        value = volume if liquid else step
        return found + self._open.say(t, "unrecorded-dose", change.from_t, value, text)

    def _likely(self, before: float, after: float, tank_ml: float) -> tuple[str, float]:
        """The liquid of which the least explains the step, and how much."""
        ways = [
            (volume_for(self._settings.mode, before, after, tank_ml, sd), name)
            for name, sd in self._liquids.items()
        ]
        ways = [(volume, name) for volume, name in ways if math.isfinite(volume)]
        return (min(ways)[1], min(ways)[0]) if ways else ("", math.nan)

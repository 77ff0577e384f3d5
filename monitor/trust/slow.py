"""Fouling: a slow creep of the period up that no temperature, dose or recorded water explains.

Rules:
- Judged once a minute on the minutes that `intake` takes up, over windows of 20 to 320 min.
- Without a thermometer cooling looks the same: the creep must beat what it could do.
- Ends with a wiping, with the slope gone for 50 min, or withdrawn by the answer to a dose.
- Fresh water running in cannot be told from fouling until a dose decides: the evidence says so.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from monitor import bench
from monitor.blocks import NAN, Second
from monitor.dosing.ledger import Change, Dose
from monitor.findings import Finding
from monitor.trust.intake import SETTLE_S, Intake, Levelled
from monitor.trust.minutes import ENDS, Line, Minutes, fit, knee
from monitor.trust.response import DECIDED, Asked, favours_fouling

# minutes and the least rise (ln) over them
WINDOWS = ((20, 0.008), (40, 0.005), (80, 0.0045), (160, 0.0045), (320, 0.0045))
ACROSS = 80  # minutes from which a window may reach across segments
OVER_BORDERS = 1.4  # times the least rise there: each border costs a free level
LEAST_PER_H = 0.003
RMS, SDS, FLICKER, TICKS = 8.0, 5.0, 3.0, 2.0  # how many of each the rise must be
STRAIGHT = (0.33, 0.85)  # share of the last third; the tail of a mixing brakes
YOUNG_S, YOUNG_LEAST = 5400.0, 0.42  # so soon after a dose or step it must be straighter
TEMP_U_C = 1.0  # of a tank without a thermometer, where the bench does not say
PER_C = 0.0212  # ln period a Celsius near 25 C
LATELY = 40  # minutes whose slope is the creep's slope of late
MIXED = 3  # minutes read once a dose has mixed
LEAST_RISING = 10  # minutes through which its own slope is drawn
GONE_MIN, GONE = 50, 0.3  # that long a slope surely under that share of the one said
WATER = 1.6  # a creep explained as water is doubted again when that much steeper
WIPED = 0.5  # share of the cost by which the level falls at once
CAUSES = {
    "": (
        "a film on the electrodes or fresh water running in: wipe the electrodes (a film comes"
        " off and the period falls back), read a check standard, or look at the level"
    ),
    "fouling": "doses are answered as through a film on the electrodes: wipe them",
    "water": "doses are answered as by clean electrodes: fresh water is running in, find the leak",
}


class Creep:
    """The slow part of one probe's judge."""

    def __init__(
        self, probe: str, settings: bench.Probe, carried: Mapping[str, Any] | None = None
    ) -> None:
        self.probe = probe
        self.fault: Finding | None = None  # in force
        self.cause = ""  # what doses have decided of a creep: "", "fouling" or "water"
        self.over_t = -math.inf  # when a creep last was over, by a wiping or of itself
        temp_u_c = TEMP_U_C if settings.temp_u_c is None else settings.temp_u_c
        self.unseen = PER_C * temp_u_c  # u of the ln level for want of a thermometer
        self._intake = Intake(settings)
        self._slope = self._u = 0.0  # ln an hour, of the creep in force
        self._base = NAN  # joined level before it; NaN until the first minute after a restart
        self._kept_cost = 0.0
        self._blind = False  # found without a thermometer
        self._water = 0.0  # slope that is known to be water
        self._odds = 0.0  # summed log likelihood ratios of the answers to doses
        self._asked: Asked | None = None
        if carried:
            self._resume(carried)

    @property
    def minutes(self) -> Minutes:
        """What has been taken up, for the trends too."""
        return self._intake.minutes

    @property
    def cost(self) -> float:
        """ln period risen since the creep in force began; 0 without one."""
        if self.fault is None:
            return 0.0
        if self._base != self._base:
            return self._kept_cost
        return max(self.minutes.recent(ENDS) - self._base, 0.0)

    def straight(self, line: Line) -> bool:
        """No tail of a mixing, no step: the newest minutes' line keeps its slope to its end."""
        young = float(self.minutes.column(0, 1)[0]) - self._intake.paused_t < YOUNG_S
        return (YOUNG_LEAST if young else STRAIGHT[0]) <= line.share <= STRAIGHT[1]

    def step(self, second: Second, level: Levelled, changes: Sequence[Change]) -> list[Finding]:
        """One closed second: `fouling` begun or ended in it."""
        intake = self._intake
        if changes and self.fault is not None:
            self._ask(changes, second.t)
        minute = intake.step(second, level, changes)
        if intake.jump is not None:
            jump, intake.jump = intake.jump, None
            if self.fault is not None and jump.step < -WIPED * self.cost:
                return [self._over(second.t, jump.lost_t)]
        if not minute:
            return []
        if self.fault is None:
            return self._begin(second.t, level)
        if self._base != self._base:
            self._base = self.minutes.recent(1) - self._kept_cost
        return self._follow(second.t)

    def carry(self) -> dict[str, Any]:
        """The creep in force and what is known of it."""
        kept: dict[str, Any] = {
            "cause": self.cause,
            "water": self._water,
            "intake": self._intake.carry(),
        }
        if self.fault is not None:
            kept.update(
                fault=dict(self.fault),
                slope=self._slope,
                u=self._u,
                cost=self.cost,
                odds=self._odds,
                blind=self._blind,
            )
        return kept

    def _resume(self, carried: Mapping[str, Any]) -> None:
        self.cause, self._water = carried["cause"], carried["water"]
        if "fault" in carried:
            self.fault = dict(carried["fault"])
            self._slope, self._u = carried["slope"], carried["u"]
            self._odds, self._kept_cost = carried["odds"], carried["cost"]
            self._blind = carried["blind"]
        self._intake.slope = self._slope or self._water
        self._intake.resume(carried["intake"])

    def _begin(self, t: float, level: Levelled) -> list[Finding]:
        """No creep in force: is there one?"""
        minutes = self.minutes
        n = len(minutes)
        known = GONE * self._water * GONE_MIN / 60.0
        if self._water and n >= GONE_MIN and minutes.moved(GONE_MIN) < known:
            self._water, self.cause, self._intake.slope = 0.0, "", 0.0
        for wide, least in WINDOWS:
            if wide > n:
                break
            if not minutes.one_segment(wide):
                if wide < ACROSS:
                    continue
                least *= OVER_BORDERS
            if minutes.moved(wide) > 0.6 * least:
                line = self._line(wide)
                if self._rises(line, wide, least, level):
                    return [self._say(t, line)]
        return []

    def _line(self, wide: int) -> Line:
        column = self.minutes.column
        return fit(column(0, wide), column(1, wide), column(2, wide), column(4, wide), 1.0)

    def _rises(self, line: Line, wide: int, least: float, level: Levelled) -> bool:
        """Is this creep beyond its doubt, and straight?"""
        if line.by_temp != line.by_temp:
            if wide < ACROSS:
                return False
            least = max(least, 2.0 * self.unseen)
        if line.rise < max(least, RMS * line.rms, SDS * line.u * line.span_h):
            return False
        if line.slope < max(LEAST_PER_H, WATER * self._water):
            return False
        if not self.straight(line):
            return False
        flicker = self.minutes.flicker(wide)
        if flicker == flicker and line.rise * 2.0 / 3.0 < FLICKER * flicker:
            return False
        tick = level.tick_us / math.exp(level.m)
        return level.noise >= 0.4 * tick or line.rise >= TICKS * tick

    def _say(self, t: float, line: Line) -> Finding:
        times = self.minutes.column(0, len(self.minutes))
        from_t, self._base = knee(times - 30.0, np.array(self.minutes.joined))
        since = int(np.sum(times - 30.0 > from_t))
        if since >= LEAST_RISING:  # the window also held what lay before the creep
            line = self._line(since)
        self._slope, self._u = line.slope, line.u
        self._odds, self.cause = 0.0, ""
        self._blind = line.by_temp != line.by_temp
        self._intake.slope = line.slope
        self.fault = {
            "finding": "fault",
            "probe": self.probe,
            "t": t,
            "fault": "fouling",
            "from_t": from_t,
            "to_t": None,
            "evidence": "",
        }
        self._word()
        return dict(self.fault)

    def _word(self) -> None:
        """The evidence: what was seen, both causes, the act that tells them apart."""
        assert self.fault is not None
        warmth = "no dose or temperature explains it"
        if self._blind:
            cooler_c = self.cost / PER_C
            warmth = f"no dose explains it; no thermometer: {cooler_c:.1f} C cooler looks the same"
        self.fault["evidence"] = (
            f"period up {100.0 * self.cost:.2f} % since {self.fault['from_t']:.0f} s,"
            f" {100.0 * self._slope:.2f} +- {200.0 * self._u:.2f} %/h,"
            f" {warmth}; {CAUSES[self.cause]}"
        )

    def _follow(self, t: float) -> list[Finding]:
        """The creep in force: answered by a dose, wiped, or gone?"""
        assert self.fault is not None
        minutes = self.minutes
        if self._asked is not None:
            ended = self._answered(t, self._asked)
            if ended:
                return ended
        if len(minutes) > 2 and minutes.one_segment(3):
            level = minutes.column(1, 3)
            if float(level[2] - level[0]) < -WIPED * self.cost:
                return [self._over(t, t - 60.0)]
        if t % 300 == 0 and len(minutes) >= GONE_MIN and minutes.one_segment(GONE_MIN):
            began_t = float(minutes.column(0, GONE_MIN)[0]) - 60.0
            line = self._line(GONE_MIN)
            if began_t >= self.fault["t"] and line.slope + 2.0 * line.u < GONE * self._slope:
                return [self._over(t, began_t)]
        return []

    def _ask(self, changes: Sequence[Change], t: float) -> None:
        """A dose is given: note what was read before it."""
        self._asked = None  # a struck dose, or two in one mixing, decide nothing
        dose = changes[-1]
        if not isinstance(dose, Dose) or not dose.counts:
            return
        kept = len(self.minutes)
        times = self.minutes.column(0, kept)
        before = int(np.searchsorted(times, dose.time_s, side="right"))  # it may be told of late
        if before < 3 or t - times[before - 1] > SETTLE_S:
            return
        salinity = float(self.minutes.column(3, kept)[before - 3 : before].mean())
        if salinity == salinity:
            read_t = float(times[before - 2]) - 30.0
            unseen = self.unseen if self._blind else 0.0
            self._asked = Asked(dose, salinity, self.cost, *self._now(), read_t, unseen)

    def _now(self) -> tuple[float, float]:
        """The creep's slope of late and its u: a film may slow down as it grows."""
        wide = min(len(self.minutes), LATELY)
        if wide < LEAST_RISING or not self.minutes.one_segment(wide):
            return self._slope, self._u
        line = self._line(wide)
        return line.slope, line.u

    def _answered(self, t: float, asked: Asked) -> list[Finding]:
        """A dose has mixed: what does its answer speak for?"""
        if not self.minutes.one_segment(MIXED):
            return []
        self._asked = None
        odds = favours_fouling(asked, float(self.minutes.column(3, MIXED).mean()), t - 30.0 * MIXED)
        if odds != odds:
            return []
        self._odds += odds
        if self._odds > DECIDED:
            self.cause = "fouling"
            self._word()
        if self._odds > -DECIDED:
            return []
        self.cause, self._water = "water", self._slope
        self._word()
        ended = self._end(t, t)
        ended["withdrawn"] = (
            f"the dose at {asked.dose.time_s:.0f} s was answered as by clean electrodes:"
            " fresh water is running in"
        )
        return [ended]

    def _over(self, t: float, to_t: float) -> Finding:
        """Wiped, or gone of itself."""
        self._intake.begin_anew(to_t)
        self.over_t = t
        self.cause, self._intake.slope = "", 0.0
        return self._end(t, to_t)

    def _end(self, t: float, to_t: float) -> Finding:
        assert self.fault is not None
        ended = {**self.fault, "t": t, "to_t": max(to_t, self.fault["from_t"])}
        self.fault, self._slope, self._odds, self._asked = None, 0.0, 0.0, None
        return ended

"""A guided run through the standards, without any I/O: readings in, what to do now out.

Phases:
- `ask`: waits to be told which standard the probe is in (`put_in`); any order, repeats welcome.
- `settle`: until the last REST_S seconds show neither a trend nor a jump.
- `read`: takes readings; a bubble, a lost pulse or a drift throws them away and settles again.
- `question`: the standard just taken does not fit the others; `keep` or `drop`.
A run can be left at any time: `taken` is all that has to be kept.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from monitor.bench import Standard
from monitor.calibration.calibration import CalibrationError
from monitor.calibration.fitting import fit
from monitor.water import medium

REST_S = 20
LEAST_S = 15  # readings are taken over at least so long
TREND = 5e-4  # relative change from half to half of REST_S that is still rest: slow noise
BUBBLE = 4e-3  # relative jump up of a second's mean that is no noise
STRAY = 0.02  # and of a single reading
SILENCE_S = 5  # without a reading
ODD_SD = 5.0
ODD_SHARE = 0.02  # relative difference from what the others say that is questioned


class Pooled:
    """Readings of one stay in a standard."""

    def __init__(self) -> None:
        self.seconds: list[float] = []  # mean ln period of each whole second
        self.periods: list[float] = []
        self.temps: list[float] = []
        self.squares = 0.0  # of ln period about the second's mean
        self.free = 0  # and their degrees of freedom

    @property
    def jitter(self) -> float:
        """Relative noise of a single reading."""
        return math.sqrt(self.squares / self.free) if self.free else 0.0


class GuidedRun:
    """One probe's run. `phase` and `say()` tell where it stands, `taken` what it has."""

    def __init__(
        self,
        of: str,
        tick_us: float,
        plan: Sequence[float] = (),
        readings: int = 120,
        taken: Sequence[Mapping[str, Any]] = (),
    ) -> None:
        self.medium = of
        self.tick_us = tick_us
        self.plan = list(plan)
        self.readings = readings
        self.taken = [dict(standard) for standard in taken]
        self.phase = "ask"
        self.why = ""  # what was refused or is questioned, for a person
        self._now: dict[str, Any] = {}
        self._pool = Pooled()
        self._second = -1
        self._open: list[tuple[float, float]] = []
        self._last_warmth = 0.0
        self._level_us = 0.0
        self._noise = 0.0, 0.0  # of a second's mean, of a single reading

    # what a person says

    def put_in(self, salinity_pct: float, **fields: Any) -> None:
        """The probe is in this standard now; `fields` as the bench file's. Raises ValueError."""
        checked = Standard(salinity_pct=float(salinity_pct), period_us=1.0, **fields)
        self._now = checked.model_dump(mode="json", exclude_none=True)
        self._settle("")

    def keep(self) -> None:
        """Keep the standard that was questioned."""
        if self.phase == "question":
            self._next("")

    def drop(self) -> None:
        """Drop the last standard taken, questioned or not, or leave the one under way."""
        if self.phase in ("ask", "question") and self.taken:
            gone = self.taken.pop()
            self._next(f"{gone['salinity_pct']:g} % dropped")
        elif self.phase in ("settle", "read"):
            self._next(f"{self._now['salinity_pct']:g} % left")

    # what the probe says

    def feed(self, time_s: float, period_us: float, temp_c: float | None) -> None:
        """One reading (period 0 = no pulse); times never go back."""
        second = math.floor(time_s)
        if second != self._second:
            if self._second >= 0:
                self._close(second - self._second)
            self._second = second
        self._open.append((period_us, math.nan if temp_c is None else temp_c))

    def say(self) -> str:
        """What to do now, in one line."""
        if self.phase == "settle":
            return f"{self._name()}: hold still, coming to rest{self._level()}"
        if self.phase == "read":
            done = len(self._pool.periods)
            return f"{self._name()}: reading {done} of {self.readings}{self._level()}"
        if self.phase == "question":
            return f"{self.why}; keep or drop it?"
        left = self.to_come()
        if not self.taken and not self.why:
            return f"into which standard first?{' ' + self._list(left) if left else ''}"
        after = "; ".join(part for part in (self.why, "rinse the probe") if part)
        if not left:
            return f"{after}; all {len(self.taken)} taken: another one, or done?"
        return f"{after}; into which standard next? {self._list(left)}"

    def _list(self, left: Sequence[float]) -> str:
        return f"{', '.join(f'{s:g}' for s in left)} % to come"

    def to_come(self) -> list[float]:
        """Planned salinities that are not taken yet."""
        left = list(self.plan)
        for standard in self.taken:
            if standard["salinity_pct"] in left:
                left.remove(standard["salinity_pct"])
        return left

    # within

    def _close(self, passed: int) -> None:
        """A whole second has passed, or several without a reading."""
        rows, self._open = self._open, []
        if self.phase not in ("settle", "read"):
            return
        pulses = [period for period, _ in rows if period > 0]
        if passed > SILENCE_S or (rows and len(pulses) < len(rows)) or not pulses:
            self._settle("no pulse: is the probe in, and switched on?")
            return
        logs = [math.log(period) for period in pulses]
        temps = [temp for _, temp in rows if temp == temp]
        warmth = self._warmth(temps)  # takes the temperature's part out
        mean = math.fsum(logs) / len(logs) + warmth
        if self.phase == "read" and self._bubble(mean, max(logs) + warmth):
            self._settle("a bubble, or the probe was moved: tap it and hold still")
        pool = self._pool
        pool.seconds.append(mean)
        self._level_us = math.exp(mean - warmth)
        pool.squares += math.fsum((value + warmth - mean) ** 2 for value in logs)
        pool.free += len(logs) - 1
        if self.phase == "settle":
            self._rest()
            return
        pool.periods += pulses
        pool.temps += temps
        self._enough()

    def _warmth(self, temps: Sequence[float]) -> float:
        """What to add to ln period, at most, to have it at 25 C; the last one where none is."""
        if temps:
            mean = math.fsum(temps) / len(temps)
            self._last_warmth = math.log(medium(self.medium).sensitivity(mean)[0])
        return self._last_warmth

    def _bubble(self, mean: float, highest: float) -> bool:
        level = self._pool.seconds[-1]
        stray = max(STRAY, 6 * self._noise[1])
        return mean - level > max(BUBBLE, 8 * self._noise[0]) or highest - level > stray

    def _rest(self) -> None:
        last = self._pool.seconds[-REST_S:]
        if len(last) < REST_S:
            return
        change, sd = _halves(last)
        self._noise = sd, self._pool.jitter
        if abs(change) < max(TREND, 3 * sd * math.sqrt(4 / REST_S)):
            self._pool = Pooled()
            self._pool.seconds = last[-1:]
            self.phase, self.why = "read", ""

    def _enough(self) -> None:
        pool = self._pool
        if len(pool.periods) < self.readings or len(pool.seconds) < LEAST_S:
            return
        change, sd = _halves(pool.seconds)
        if abs(change) > max(TREND, 4 * sd * math.sqrt(4 / len(pool.seconds))):
            self._settle("the reading drifts: not at rest yet")
            return
        n = len(pool.periods)
        mean = math.fsum(pool.periods) / n
        spread = math.fsum((period - mean) ** 2 for period in pool.periods) / max(n - 1, 1)
        self._now |= {"period_us": round(mean, 4), "sd_us": round(math.sqrt(spread), 4)}
        self._now["readings"] = n
        if pool.temps:
            self._now["temp_c"] = round(math.fsum(pool.temps) / len(pool.temps), 3)
        self.taken.append(self._now)
        self.why = self.odd()
        if self.why:
            self.phase = "question"
        else:
            self._next(f"{self._now['salinity_pct']:g} % taken, {self._now['period_us']:g} us")

    def odd(self) -> str:
        """What is odd about the last standard beside the others; '' if nothing is."""
        new, others = self.taken[-1], self.taken[:-1]
        for other in others:
            up = new["salinity_pct"] - other["salinity_pct"]
            if up and up * (new["period_us"] - other["period_us"]) > 0:
                return (
                    f"{new['salinity_pct']:g} % reads {new['period_us']:g} us, but"
                    f" {other['salinity_pct']:g} % read {other['period_us']:g} us:"
                    " more salt must read shorter"
                )
        if len(others) < 3 or not new["salinity_pct"] > 0:
            return ""
        return self._against_fit(new, others)

    def _against_fit(self, new: Mapping[str, Any], others: Sequence[Mapping[str, Any]]) -> str:
        try:
            made = fit([Standard(**other) for other in others], self.medium, self.tick_us)
        except CalibrationError as wrong:
            return str(wrong)
        temp = new.get("temp_c", made.temp_c)
        expected = made.period_us(new["salinity_pct"], temp)
        slopes = made.slopes(expected, temp)
        if slopes is None:
            return ""
        off = math.log(new["period_us"] / expected) * slopes.of_ln_p / new["salinity_pct"]
        u = made.u_pct(expected, temp) / new["salinity_pct"]
        if abs(off) < max(ODD_SHARE, ODD_SD * u):
            return ""
        reads = new["salinity_pct"] * (1 + off)
        return f"{new['salinity_pct']:g} % reads as {reads:.4g} % by the others"

    def _settle(self, why: str) -> None:
        self.phase, self.why, self._pool = "settle", why, Pooled()

    def _next(self, why: str) -> None:
        self.phase, self.why, self._pool, self._now = "ask", why, Pooled(), {}

    def _name(self) -> str:
        start = f"{self.why}; " if self.why else ""
        return f"{start}{self._now['salinity_pct']:g} %"

    def _level(self) -> str:
        if not self._pool.seconds:
            return ""
        return f", {self._level_us:.1f} us"


def _halves(seconds: Sequence[float]) -> tuple[float, float]:
    """Change from the first half's mean to the second's, and the spread about both."""
    half = len(seconds) // 2
    first, second = seconds[:half], seconds[half:]
    means = math.fsum(first) / half, math.fsum(second) / len(second)
    around = [(v - means[0]) ** 2 for v in first] + [(v - means[1]) ** 2 for v in second]
    return means[1] - means[0], math.sqrt(math.fsum(around) / (len(seconds) - 2))

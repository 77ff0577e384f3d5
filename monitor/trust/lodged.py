"""`lodged-bubble`: the period goes up within three seconds and stays there.

A step between two straight lines, on one-second medians: six before it, four across, sixteen after
it. Water that mixes takes longer to arrive, rings or is turbulent: against it the step must be ten
times as steep as either line, the lines must hold, and the rise must neither go on nor be lost.
The bounds were set on drawn doses of twelve kinds of mixing (some 300 recorded, 100 unrecorded, 100
recorded late), of which none passes; one of the late ones did before `GOES_ON` was set.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

from monitor.findings import Finding
from monitor.trust.force import InForce
from monitor.trust.level import Level

BEFORE, ACROSS, AFTER = 6, 4, 16
ALL = BEFORE + ACROSS + AFTER
LEAST, MOST = 0.045, math.log(2.6)
STEEP = 10.0  # the step, over what either line moves in a second
NEAR_LINE, NEAR_LONG_LINE = 0.08, 0.1  # of the step: 80th percentile of the distances
NEAR_SDS = 2.5  # or so many deviations of a median
STAYS = 0.4  # of the step, to the end
GOES_ON, GOES_ON_CALM = 0.5, 0.2  # of the step: what moves by more after it is water
BETWEEN = (0.15, 0.85)  # of the step: medians there are on their way
LONGEST_S, LONGEST_DOSED_S = 3, 2  # so many of them; after a dose, which may be as high, fewer
NEAR_DOSE_S = 68.0
FALL = 0.4  # of the step, at once: it is gone
FALL_DOSED = 0.7


class Step(NamedTuple):
    """A step up that stays: when it came, how high (ln)."""

    k: int
    height: float
    moved: float  # over the seconds after it


class Lodged:
    """Watches the medians for a bubble that lodges, and comes off."""

    def __init__(self, height: float | None) -> None:
        self.height = height  # of the one in force

    def judge(self, t: float, level: Level, force: InForce) -> list[Finding]:
        """`lodged-bubble` begun or ended in this second, which has pulses."""
        if "lodged-bubble" in force:
            k = fallen(level, t, self.height or LEAST)
            return [] if k is None else [force.end("lodged-bubble", t, float(k))]
        if force.any_of("short", "loose-lead"):
            return []
        step = step_up(level, t)
        if step is None:
            return []
        self.height = step.height
        text = (
            f"period {100.0 * math.expm1(step.height):+.1f} % within 3 s, then"
            f" {100.0 * step.moved:+.2f} % in 16 s"
        )
        return [force.begin("lodged-bubble", t, float(step.k), text)]


class Line(NamedTuple):
    """A straight line through equally spaced values."""

    first: float
    slope: float  # a value
    spread: float  # 80th percentile of the distances

    def at(self, i: float) -> float:
        return self.first + self.slope * i


def step_up(level: Level, t: float) -> Step | None:
    """Whether the last 26 medians show a bubble that lodged."""
    if len(level.medians) < ALL:
        return None
    newest, oldest = level.medians[-1], level.medians[-ALL]
    if newest[1] - oldest[1] < STAYS * LEAST or newest[0] - oldest[0] > ALL + 6:
        return None
    last = list(level.medians)[-ALL:]
    values = [value for _, value in last]
    after = values[BEFORE + ACROSS :]
    low, high, long = through(values[:BEFORE]), through(after[:8]), through(after)
    middle = 0.5 * (ACROSS + 1)
    height = high.at(-middle) - low.at(BEFORE - 1 + middle)
    noise = NEAR_SDS * level.sb
    if not (
        LEAST <= height < MOST
        and max(low.spread, high.spread) <= max(NEAR_LINE * height, noise)
        and long.spread <= max(NEAR_LONG_LINE * height, noise)
        and STEEP * max(abs(low.slope), abs(high.slope)) <= height
    ):
        return None
    foot, top = low.at(BEFORE - 1), high.first
    moved = long.at(AFTER - 1) - long.first
    goes_on = GOES_ON if level.after_dose(t - ALL) else GOES_ON_CALM
    if long.at(AFTER - 1) - foot < STAYS * height or moved > goes_on * height:
        return None
    bounds = [foot + share * (top - foot) for share in BETWEEN]
    across = values[BEFORE - 2 : BEFORE + ACROSS + 2]
    rising = sum(bounds[0] < value < bounds[1] for value in across)
    if rising > (LONGEST_DOSED_S if dosed(level, t, height) else LONGEST_S):
        return None
    k = next(k for k, value in last[BEFORE - 1 :] if value > 0.5 * (foot + top))
    return Step(k, height, moved)


def dosed(level: Level, t: float, height: float) -> bool:
    """Whether a dose that is as high as this ended not long ago."""
    return t <= level.dosed_until_t + NEAR_DOSE_S + ALL and height <= 3.0 * level.step_ln


def fallen(level: Level, t: float, height: float) -> int | None:
    """The second in which the level fell back at once by a good part of the step."""
    if len(level.medians) < 6:
        return None
    last = list(level.medians)[-6:]
    before = min(value for _, value in last[:2])
    least = (FALL_DOSED if dosed(level, t, height) else FALL) * height
    if before - max(value for _, value in last[-3:]) <= least:
        return None
    return next(k for k, value in last if value < before - 0.5 * least)


def through(values: Sequence[float]) -> Line:
    """The line of least squares."""
    n = len(values)
    middle = 0.5 * (n - 1)
    mean = sum(values) / n
    slope = sum((i - middle) * v for i, v in enumerate(values)) / (n * (n * n - 1) / 12.0)
    off = sorted(abs(v - mean - slope * (i - middle)) for i, v in enumerate(values))
    return Line(mean - slope * middle, slope, off[int(0.8 * n)])

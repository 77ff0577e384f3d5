"""`lodged-bubble`: the period goes up within three seconds and stands still there.

Mixing takes longer than three seconds to arrive, ringing fades, poured water is turbulent. Judged
on one-second medians: six before, four across the step, sixteen after it.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from monitor.trust.level import Level

BEFORE, ACROSS, AFTER = 6, 4, 16
ALL = BEFORE + ACROSS + AFTER
LEAST, MOST = 0.045, math.log(2.6)
RUN_UP = 14
NEAR_DOSE_S = 68.0
FALL = 0.4  # of the step, at once: it is gone


class Step(NamedTuple):
    """A step up that stands still: when it came, how high (ln)."""

    k: int
    height: float
    moved: float  # over the seconds after it


def step_up(level: Level, t: float, bubbling: bool) -> Step | None:
    """Whether the last 26 medians show a bubble that lodged."""
    if len(level.medians) < ALL:
        return None
    newest, oldest = level.medians[-1], level.medians[-ALL]
    if newest[1] - oldest[1] < 0.8 * LEAST or newest[0] - oldest[0] > ALL + 6:
        return None
    last = list(level.medians)
    values = [value for _, value in last[-ALL:]]
    before, after = values[:BEFORE], values[BEFORE + ACROSS :]
    first, second = _median(after[:8]), _median(after[8:])
    low, high = _median(before), 0.5 * (first + second)
    height = high - low
    if not LEAST <= height < MOST:
        return None
    sb = level.sb
    if abs(second - first) >= max(0.12 * height, 1.5 * sb):
        return None
    if abs(_median(before[:3]) - _median(before[3:])) >= max(0.12 * height, 2.5 * sb):
        return None
    near = max(0.15 * height, 2.0 * sb)
    stand = sum(abs(value - high) <= near for value in after)
    stood = sum(abs(value - low) <= near for value in before)
    if stand < (13 if bubbling else 12) or stood < 5:
        return None
    between = [low + share * height for share in (0.12, 0.88)]
    if sum(between[0] < value < between[1] for value in values) > 3:
        return None
    if not _plausible(level, t, last, height, after):
        return None
    k = next(k for k, value in last[-ALL + BEFORE - 1 :] if value > low + 0.5 * height)
    return Step(k, height, second - first)


def _plausible(
    level: Level, t: float, last: list[tuple[int, float]], height: float, after: list[float]
) -> bool:
    """Near a dose the dose itself must be told from a bubble; away from one, poured water."""
    known = level.step_ln
    if t <= level.dosed_until_t + NEAR_DOSE_S + ALL and height <= 3.0 * known:
        run_up = [value for _, value in last[-ALL - RUN_UP + BEFORE : -ALL + BEFORE]]
        span = max(run_up) - min(run_up) if run_up else math.inf
        return height >= 0.8 * known and span < max(0.22 * height, 3.0 * level.sb)
    n = len(after)
    middle, mean = 0.5 * (n - 1), sum(after) / n
    slope = sum((i - middle) * v for i, v in enumerate(after)) / (n * (n * n - 1) / 12.0)
    off = sorted(abs(v - mean - slope * (i - middle)) for i, v in enumerate(after))
    return off[int(0.75 * n)] < 2.6 * level.sb + 0.001


def fallen(level: Level, height: float) -> int | None:
    """The second in which the level fell back at once by a good part of the step."""
    if len(level.medians) < 8:
        return None
    last = list(level.medians)[-8:]
    before = min(value for _, value in last[:2])
    if before - max(value for _, value in last[-3:]) <= FALL * height:
        return None
    return next(k for k, value in last if value < before - 0.5 * FALL * height)


def _median(values: list[float]) -> float:
    ordered = sorted(values)
    n = len(ordered)
    return 0.5 * (ordered[(n - 1) // 2] + ordered[n // 2])

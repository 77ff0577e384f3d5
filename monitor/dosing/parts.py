"""A change that must not come at once: equal steps of salinity, and the waits between them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

from monitor.bench import Tank
from monitor.dosing.balance import volume_for

AT_ONCE_H = 0.25  # a change within it counts as one
MOST_PARTS = 500


class PlanError(ValueError):
    """There is no such dose; `str()` is the one line to show."""


@dataclass(frozen=True)
class Part:
    """One opening, or one pouring."""

    volume_ml: float
    open_s: float | None  # None without a valve
    wait_s: float  # before it
    predicted_pct: float  # where the tank lands after it


def steps_of(settings: Tank, change_pct: float) -> int:
    """In how many equal steps the tank may change by so much.

    Raises PlanError where that would never end.
    """
    if settings.fastest_pct_per_h is None:
        return 1
    steps = abs(change_pct) / (settings.fastest_pct_per_h * AT_ONCE_H)
    if steps > MOST_PARTS:
        hours = abs(change_pct) / settings.fastest_pct_per_h
        raise PlanError(
            f"{abs(change_pct):.3g} % at {settings.fastest_pct_per_h:g} %/h takes {hours:.0f} h;"
            f" expected at most {MOST_PARTS * AT_ONCE_H:.0f} h"
        )
    return max(math.ceil(steps - 1e-9), 1)


def wait_s(settings: Tank, change_pct: float, steps: int) -> float:
    """Between two steps, in whole minutes: the waits together last as long as the change must."""
    if steps == 1 or settings.fastest_pct_per_h is None:
        return 0.0
    least_s = 3600.0 * abs(change_pct) / settings.fastest_pct_per_h / (steps - 1)
    return 60.0 * math.ceil(least_s / 60.0 - 1e-9)


def volumes(
    mode: str, stops: list[float], tank_ml: float, liquid_pct: float, volume_ml: float
) -> list[float]:
    """`volume_ml` of the liquid cut up so that it leads from stop to stop."""
    if len(stops) == 2:
        return [volume_ml]
    cut: list[float] = []
    for here, there in pairwise(stops):
        cut.append(volume_for(mode, here, there, tank_ml, liquid_pct))
        tank_ml += cut[-1] if mode == "grows" else 0.0
    return [ml * volume_ml / sum(cut) for ml in cut]


def stops(from_pct: float, to_pct: float, steps: int) -> list[float]:
    """Where the tank stands before the first step and after each."""
    return [from_pct + (to_pct - from_pct) * i / steps for i in range(steps)] + [to_pct]

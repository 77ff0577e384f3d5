"""Was it what was meant: the measured step against the recorded dose, and what may explain it."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

from monitor.dosing.ledger import Dose

K99 = 2.6  # coverage factor of the comparison at 99 %
MATCH = 2.6  # standard doubts within which a cause explains what was measured


@dataclass(frozen=True)
class Outcome:
    """A step as measured, beside the dose that was to make it. Salinities in %, u standard."""

    dose: Dose
    before_pct: float
    before_u_pct: float
    after_pct: float
    predicted_pct: float
    u_pct: float  # of after - predicted, as steps: all that the verdict weighs

    @property
    def agrees(self) -> bool:
        """Measured and predicted steps are equal within their doubt at 99 %."""
        return abs(self.after_pct - self.predicted_pct) <= K99 * self.u_pct


def likely_reasons(outcome: Outcome, liquids: Mapping[str, float]) -> list[str]:
    """What may explain a disagreement, the likeliest first, each with its numbers.

    Parameters
    ----------
    outcome : the step that disagrees
    liquids : salinity (%) of each liquid at hand, by name
    """
    share, u_share = _share(outcome)
    found: list[tuple[float, str]] = []
    for name, pct in liquids.items():
        if name == outcome.dose.liquid:
            continue
        other = _lands(outcome, liquid=name, liquid_pct=pct)
        off = abs(other - outcome.after_pct) / outcome.u_pct
        if off <= MATCH:
            found.append((0.0, f"other liquid: {name} would land at {other:.5f} %"))
    said = f"{100 * share:.0f} +- {200 * u_share:.0f} % of the step"
    volume = _solved(outcome, lambda f: _lands(outcome, volume_ml=f * outcome.dose.volume_ml))
    if volume is not None and share > 0.0:
        ml = volume * outcome.dose.volume_ml
        word = "part of the dose" if share < 1.0 else "more than the dose"
        text = f"{word}: {ml:.1f} mL of {outcome.dose.volume_ml:g} mL would do it ({said})"
        found.append((1.0 if abs(share - 1.0) > 0.1 else 2.5, text))
    tank_ml = outcome.dose.tank_ml
    tank = _solved(outcome, lambda f: _lands(outcome, tank_ml=f * tank_ml)) if tank_ml else None
    if tank is not None and tank_ml and share > 0.0:
        text = f"tank volume: {tank * tank_ml:.0f} mL instead of {tank_ml:.0f} mL would do it"
        found.append((2.0 if 0.7 < share < 1.4 else 3.0, text))
    if 0.5 < share < 1.0:
        found.append((2.8, f"probe answering weakly: it shows {said}"))
    if share <= 0.0 and not found:
        found.append((4.0, f"another liquid: the step went the other way ({said})"))
    return [text for _, text in sorted(found)]


def _share(outcome: Outcome) -> tuple[float, float]:
    """Measured step over predicted step, and its standard doubt."""
    step = outcome.predicted_pct - outcome.before_pct
    if abs(step) < 1e-9:
        return math.nan, math.nan
    return (outcome.after_pct - outcome.before_pct) / step, outcome.u_pct / abs(step)


def _lands(outcome: Outcome, **changed: object) -> float:
    dose = replace(outcome.dose, **changed)  # type: ignore[arg-type]
    return dose.landing(outcome.before_pct, outcome.before_u_pct)[0]


def _solved(outcome: Outcome, lands: Callable[[float], float]) -> float | None:
    """The factor from 1/16 to 16 with which it would have landed as measured, by bisection."""
    low, high = 1 / 16, 16.0
    off_low, off_high = lands(low) - outcome.after_pct, lands(high) - outcome.after_pct
    if not off_low * off_high <= 0.0:
        return None
    for _ in range(40):
        middle = math.sqrt(low * high)
        if (lands(middle) - outcome.after_pct) * off_low > 0.0:
            low = middle
        else:
            high = middle
    return low

"""What several doses tell together: what the tank really holds, or how weakly the probe answers.

Of one dose both look alike: a step smaller than recorded. Over several the volume shows by growing
with them, a weak answer by being the same share of every step. Each is estimated as if it were the
only cause, by least squares, and the two are held against each other. What all doses have in
common (the liquid's salinity, the volume where the answer is asked for) is propagated apart: more
doses do not make it smaller.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

from monitor.dosing.balance import Known
from monitor.dosing.ledger import Dose

FEWEST = 3  # doses
TURNS = 30
K95 = 2.0
DECIDES = 6.0  # chi-squared by which one cause must beat the other: odds of 20
NORMAL_99 = 2.326


@dataclass(frozen=True)
class Answer:
    """A dose and the step that the probe read; `u_pct` is the step's standard uncertainty."""

    dose: Dose
    before_pct: float
    after_pct: float
    u_pct: float


Estimate = Callable[[Sequence[Answer]], Known]


@dataclass(frozen=True)
class Lesson:
    """Estimates from several doses, each as if it were the only cause; standard uncertainties."""

    doses: int
    told_ml: float  # what the newest dose's tank held by the book
    tank_ml: Known  # what it held, if the book's volume is wrong
    response: Known  # share of each step that the probe shows, if it answers weakly
    likely: str  # 'as recorded', 'tank volume', 'response', 'either' or 'neither'


def lesson(answers: Sequence[Answer]) -> Lesson | None:
    """What the doses tell together; None with fewer than three that can be reckoned with."""
    known = [a for a in answers if _usable(a)]
    if len(known) < FEWEST:
        return None
    extra, response = _extra_ml(known), _response(known)
    newest = known[-1].dose
    volume_u = math.hypot(extra.u, *_shifts(known, _extra_ml, tank=False))
    response_u = math.hypot(response.u, *_shifts(known, _response, tank=True))
    return Lesson(
        doses=len(known),
        told_ml=newest.tank_ml,
        tank_ml=Known(newest.tank_ml + extra.value, volume_u),
        response=Known(response.value, response_u),
        likely=_likely(known, extra.value, Known(response.value, response_u)),
    )


def in_words(found: Lesson) -> str:
    """One sentence for a person."""
    share = f"{100 * found.response.value:.0f} +- {100 * K95 * found.response.u:.0f} %"
    volume = f"{found.tank_ml.value:.0f} +- {K95 * found.tank_ml.u:.0f} mL"
    start = f"{found.doses} doses together: steps are {share} of what was recorded"
    told = f"instead of {found.told_ml:.0f} mL"
    return {
        "as recorded": f"{start}: as they should be (tank {volume}, by the book"
        f" {found.told_ml:.0f} mL)",
        "tank volume": f"{start}: the tank holds {volume} {told}",
        "response": f"{start}: the probe answers with that share; another tank volume does not fit",
        "either": f"{start}: the tank holds {volume} {told}, or the probe answers with that share;"
        " the doses alone cannot tell which",
        "neither": f"{start}, but neither tank volume nor a weak answer fits them all",
    }[found.likely]


def _usable(answer: Answer) -> bool:
    step = _step(answer)
    read = answer.after_pct - answer.before_pct
    return math.isfinite(step + read + answer.u_pct) and step != 0.0 and answer.u_pct > 0.0


def _step(answer: Answer, extra_ml: float = 0.0) -> float:
    """Step by the mass balance, had the tank held so much more."""
    dose = replace(answer.dose, tank_ml=answer.dose.tank_ml + extra_ml)
    return dose.landing(answer.before_pct, 0.0)[0] - answer.before_pct


def _weight(answer: Answer) -> float:
    """1/variance of read against reckoned step, without what all doses have in common."""
    own = replace(answer.dose, tank_u_ml=0.0, liquid_u_pct=0.0)
    return 1.0 / (answer.u_pct**2 + own.landing(answer.before_pct, 0.0)[1] ** 2)


def _response(answers: Sequence[Answer]) -> Known:
    """Share of the steps that was read."""
    weights, steps = [_weight(a) for a in answers], [_step(a) for a in answers]
    over = sum(w * step * step for w, step in zip(weights, steps))
    read = (a.after_pct - a.before_pct for a in answers)
    return Known(sum(w * p * s for w, p, s in zip(weights, steps, read)) / over, over**-0.5)


def _extra_ml(answers: Sequence[Answer]) -> Known:
    """What the tank held more than by the book, by Gauss-Newton steps kept above a tenth of it."""
    weights = [_weight(a) for a in answers]
    least = min(a.dose.tank_ml for a in answers)
    by, extra, u = 1e-4 * least, 0.0, math.inf
    for _ in range(TURNS):
        steps = [_step(a, extra) for a in answers]
        slopes = [(_step(a, extra + by) - s) / by for a, s in zip(answers, steps)]
        off = [a.after_pct - a.before_pct - s for a, s in zip(answers, steps)]
        over = sum(w * d * d for w, d in zip(weights, slopes))
        move = sum(w * d * r for w, d, r in zip(weights, slopes, off)) / over
        reached = min(max(extra + move, -0.9 * least, extra - 0.5 * least), extra + 2.0 * least)
        done, extra, u = abs(reached - extra) < 1e-9 * least, reached, over**-0.5
        if done:
            break
    return Known(extra, u)


def _shifts(answers: Sequence[Answer], estimate: Estimate, tank: bool) -> list[float]:
    """How far the estimate moves by one standard uncertainty of what the doses share."""
    at = estimate(answers).value
    moved = [
        [_other(a, liquid_pct=a.dose.liquid_pct + _own_u(a, liquid)) for a in answers]
        for liquid in sorted({a.dose.liquid for a in answers})
    ]
    if tank:
        moved.append([_other(a, tank_ml=a.dose.tank_ml + a.dose.tank_u_ml) for a in answers])
    return [estimate(each).value - at for each in moved]


def _own_u(answer: Answer, liquid: str) -> float:
    return answer.dose.liquid_u_pct if answer.dose.liquid == liquid else 0.0


def _other(answer: Answer, **figures: float) -> Answer:
    """The same answer to a dose with other figures."""
    return replace(answer, dose=replace(answer.dose, **figures))  # type: ignore[arg-type]


def _likely(answers: Sequence[Answer], extra_ml: float, response: Known) -> str:
    if abs(response.value - 1.0) <= K95 * response.u:
        return "as recorded"
    by_volume = _misfit(answers, extra_ml, 1.0)
    by_response = _misfit(answers, 0.0, response.value)
    if min(by_volume, by_response) > _chi2_99(len(answers) - 1):
        return "neither"
    if abs(by_volume - by_response) < DECIDES:
        return "either"
    return "tank volume" if by_volume < by_response else "response"


def _misfit(answers: Sequence[Answer], extra_ml: float, share: float) -> float:
    """Chi-squared of the steps read about those reckoned."""
    return sum(
        _weight(a) * (a.after_pct - a.before_pct - share * _step(a, extra_ml)) ** 2 for a in answers
    )


def _chi2_99(dof: int) -> float:
    """Chi-squared that chance exceeds once in a hundred (Wilson and Hilferty 1931; within 1 %)."""
    part = 2.0 / (9.0 * dof)
    return float(dof * (1.0 - part + NORMAL_99 * math.sqrt(part)) ** 3)

"""The cautions of a planned dose: what the one who gives it should know before the valve opens."""

from __future__ import annotations

from collections.abc import Iterator

from monitor.bench import Bench
from monitor.cautions import FAST_CHANGE, SECOND_INSTRUMENT, VALVE
from monitor.dosing.husbandry import FASTEST, Suggestion, crossed
from monitor.dosing.ledger import DOSE_U
from monitor.dosing.plan import LEAST_ML, LEAST_S, Plan
from monitor.dosing.valve import flow

AT_ONCE = 0.25  # of what a rule allows in an hour
LARGE = 0.1  # of the salinity, or of the tank
COUNTS = 0.1  # of the doubt: an error that is worth a word


def cautions(bench: Bench, plan: Plan) -> tuple[str, ...]:
    """What to mind, the gravest first; one sentence or two each."""
    return (
        *_too_fast(bench, plan),
        *_out_of_bounds(bench, plan),
        *_large(plan),
        *_valve(bench, plan),
        *_room(bench, plan),
        *_taken(bench, plan),
    )


def _too_fast(bench: Bench, plan: Plan) -> Iterator[str]:
    fastest = bench.tank[plan.tank].fastest_pct_per_h
    change = abs(plan.change_pct)
    if len(plan.parts) > 1:
        yield (
            f"At once it would change the tank by {change:.3g} %; {fastest:g} %/h is allowed:"
            f" {len(plan.parts)} parts, {plan.parts[1].wait_s / 60:.0f} min apart."
            " Wait for rest before each next one."
        )
    allowed = FASTEST.value if fastest is None else max(fastest, FASTEST.value)
    if fastest is None and change > AT_ONCE * allowed:
        yield (
            f"It changes the tank by {change:.3g} % within minutes and the tank has no"
            f" fastest_pct_per_h; {_quoted(FASTEST)}."
        )
    elif fastest is not None and fastest > FASTEST.value:
        yield f"The tank's fastest_pct_per_h of {fastest:g} is above a rule: {_quoted(FASTEST)}."
    if len(plan.parts) > 1 or change > AT_ONCE * allowed:
        yield FAST_CHANGE


def _quoted(rule: Suggestion) -> str:
    bound = {"fast": "at most", "high": "highest", "low": "lowest"}[rule.which]
    unit = "%/h" if rule.which == "fast" else "%"
    said = f"{rule.kept}: {bound} {rule.value:g} {unit}"
    return f"{said} ({rule.source}; confidence {rule.confidence})"


def _out_of_bounds(bench: Bench, plan: Plan) -> Iterator[str]:
    aim = bench.tank[plan.tank].aim_pct
    if aim is not None and not aim[0] <= plan.predicted_pct <= aim[1]:
        yield (
            f"It lands at {plan.predicted_pct:.4g} %, outside the tank's aim_pct of"
            f" {aim[0]:g} to {aim[1]:g} %."
        )
    for rule in crossed(plan.before_pct, plan.predicted_pct):
        yield f"It leads across a bound, if this is what you keep: {_quoted(rule)}."


def _large(plan: Plan) -> Iterator[str]:
    much = plan.volume_ml >= LARGE * plan.tank_ml
    far = abs(plan.change_pct) >= LARGE * plan.before_pct
    if much or far:
        yield SECOND_INSTRUMENT
    if 0.0 < abs(plan.change_pct) <= plan.before_u95_pct:
        yield (
            f"The change of {abs(plan.change_pct):.2g} % is within the doubt of the salinity now"
            f" (+- {plan.before_u95_pct:.2g} %): nobody can tell whether it is needed."
        )


def _valve(bench: Bench, plan: Plan) -> Iterator[str]:
    if plan.valve is None or plan.open_s is None:
        if plan.volume_ml < LEAST_ML * len(plan.parts):
            yield f"Less than {LEAST_ML:g} mL at a time is hard to measure out: weigh it."
        return
    runs = bench.valve[plan.valve].runs
    longest = max(open_s for open_s, _ in runs)
    each = max(part.open_s or 0.0 for part in plan.parts)
    if each < LEAST_S:
        yield f"Open for under {LEAST_S:g} s, opening and closing rule what passes."
    if each > 2.0 * longest:
        yield f"Open for {each:.1f} s, but timed for {longest:g} s at most: time a longer run."
    for remark in flow(runs).remarks:
        yield f"Valve {plan.valve}: {remark}."
    yield VALVE


def _room(bench: Bench, plan: Plan) -> Iterator[str]:
    if bench.tank[plan.tank].mode == "overflows":
        yield f"{plan.volume_ml:.4g} mL of the tank's water will run over."
    else:
        yield f"The tank will hold {plan.tank_ml + plan.volume_ml:.0f} mL after it: is there room?"


def _taken(bench: Bench, plan: Plan) -> Iterator[str]:
    """What the prediction takes for granted."""
    if plan.before_u95_pct == 0.0:
        yield "The salinity now is taken as exact: no doubt was given with it."
    if bench.tank[plan.tank].volume_u_ml == 0.0:
        yield "The tank's volume is taken as exact: the bench file gives no volume_u_ml."
    if plan.valve is None:
        yield f"The dose is taken as measured out to {100 * DOSE_U:g} % (common practice)."
    off = plan.volume_rule_off_pct
    if abs(off) > COUNTS * plan.predicted_u95_pct:
        yield (
            f"Masses are reckoned with: volumes in their place would be off by {off:+.2g} %"
            f" ({100 * off / plan.change_pct:+.2g} % of the change)."
        )

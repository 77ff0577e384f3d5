"""`stillbrine dose`: the next dose, planned; nothing is opened."""

from __future__ import annotations

import json
import math
import textwrap
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands import Refusal, Wrong, load_bench

if TYPE_CHECKING:
    from monitor.bench import Bench
    from monitor.dosing.parts import Part
    from monitor.dosing.plan import Plan

WIDTH = 78


def command(
    bench: Annotated[Path, typer.Option(help="The bench file (TOML).")],
    tank: Annotated[str, typer.Option(help="Name of the tank in it.")],
    now: Annotated[float, typer.Option("--from", help="Salinity of the tank now, %.")],
    now_u95: Annotated[
        float, typer.Option("--from-u95", help="Its doubt, half width at 95 %, in %.")
    ] = 0.0,
    to: Annotated[float | None, typer.Option(help="Salinity to reach, %.")] = None,
    liquid: Annotated[str | None, typer.Option(help="Which liquid; with --to: only it.")] = None,
    volume: Annotated[float | None, typer.Option(help="Instead of --to: how much, mL.")] = None,
    tank_ml: Annotated[
        float | None, typer.Option(help="What the tank holds now, mL, if not its volume_ml.")
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON object.")] = False,
) -> None:
    """Plan a dose: which liquid, how much, how long to open, where it lands and how surely.

    Example: stillbrine dose --bench bench.toml --tank t1 --from 0.08 --from-u95 0.0004 --to 0.09
    """
    from monitor.dosing.advice import cautions
    from monitor.dosing.parts import PlanError
    from monitor.dosing.plan import plan

    settings = load_bench(bench)
    _check(settings, bench.name, tank, liquid)
    _check_amounts(settings, now, now_u95, to, liquid, volume, tank_ml)
    try:
        made = plan(
            settings,
            tank,
            tank_ml,
            now,
            now_u95,
            aim_pct=to,
            liquid=liquid,
            volume_ml=volume,
        )
    except PlanError as refused:
        raise Refusal(str(refused)) from None
    said = cautions(settings, made)
    if as_json:
        typer.echo(json.dumps({**fields(made), "cautions": list(said)}))
    else:
        typer.echo(in_words(made, said), nl=False)


def fields(plan: Plan) -> dict[str, Any]:
    """The plan's figures for other programs."""
    return {
        "liquid": plan.liquid,
        "volume_ml": _figure(plan.volume_ml),
        "open_s": _figure(plan.open_s),
        "predicted_pct": round(plan.predicted_pct, 9),
        "predicted_u95_pct": round(plan.predicted_u95_pct, 9),
        "parts": [_part(part) for part in plan.parts],
    }


def _part(part: Part) -> dict[str, Any]:
    return {
        "volume_ml": _figure(part.volume_ml),
        "open_s": _figure(part.open_s),
        "wait_s": part.wait_s,
        "predicted_pct": round(part.predicted_pct, 9),
    }


def _figure(value: float | None) -> float | None:
    return None if value is None else float(f"{value:.9g}")


def in_words(plan: Plan, cautions: tuple[str, ...]) -> str:
    """The plan for a person, at most 80 columns wide."""
    lines = [f"{plan.tank}: {_amount(plan)} of {plan.liquid} into {plan.tank_ml:.0f} mL"]
    lines += [f"  from   {_pct(plan.before_pct, plan.before_u95_pct)}"]
    lines += [f"  lands  {_pct(plan.predicted_pct, plan.predicted_u95_pct)}"]
    if len(plan.parts) > 1:
        lines += list(_schedule(plan))
    if plan.others:
        said = ", ".join(f"{ml:.4g} mL of {name}" for name, ml in plan.others.items())
        lines += _wrapped(f"or {said}", "  ", "     ")
    off = plan.volume_rule_off_pct
    lines += [f"  taking volumes for masses is off by {off:+.1e} %"]
    for caution in cautions:
        lines += _wrapped(caution, "  ! ", "    ")
    return "\n".join(lines) + "\n"


def _amount(plan: Plan) -> str:
    amount = f"{plan.volume_ml:.4g} +- {plan.volume_u95_ml:.2g} mL"
    if plan.open_s is None:
        return amount
    return f"open {plan.valve} for {plan.open_s:.2f} s: {amount}"


def _schedule(plan: Plan) -> list[str]:
    lines, after_s = [f"  in {len(plan.parts)} parts:"], 0.0
    for part in plan.parts:
        after_s += part.wait_s
        opened = f"  open {part.open_s:.2f} s" if part.open_s is not None else ""
        lines.append(
            f"    after {_hours(after_s)}  {part.volume_ml:8.4g} mL{opened}"
            f"  to {part.predicted_pct:.5f} %"
        )
    return lines


def _hours(seconds: float) -> str:
    return f"{int(seconds // 3600):2d} h {int(seconds % 3600 // 60):02d} min"


def _pct(value: float, u95: float) -> str:
    if u95 <= 0:
        return f"{value:.5f} %"
    digits = min(max(1 - math.floor(math.log10(u95)), 2), 7)
    return f"{value:.{digits}f} +- {u95:.{digits}f} %"


def _wrapped(text: str, first: str, rest: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent=first, subsequent_indent=rest)


def _check(settings: Bench, file: str, tank: str, liquid: str | None) -> None:
    for option, name, known in (
        ("--tank", tank, list(settings.tank)),
        ("--liquid", liquid, list(settings.liquid)),
    ):
        if name is not None and name not in known:
            names = ", ".join(sorted(known)) or "none is defined"
            raise Wrong(f"{option} {name[:40]!r}: not in {file}; expected one of {names}")


def _check_amounts(
    settings: Bench,
    now: float,
    now_u95: float,
    to: float | None,
    liquid: str | None,
    volume: float | None,
    tank_ml: float | None,
) -> None:
    if (to is None) == (volume is None) or (volume is not None and liquid is None):
        raise Wrong("dose: expected --to S2, or --liquid L and --volume ML")
    from monitor.bench import SALINITY_MAX_PCT

    _within("--from", now, 0.0, SALINITY_MAX_PCT, "% by mass (35 g/kg is 3.5)")
    _within("--from-u95", now_u95, 0.0, SALINITY_MAX_PCT, "%")
    if to is not None:
        _within("--to", to, 0.0, SALINITY_MAX_PCT, "% by mass (35 g/kg is 3.5)")
    for option, ml in (("--volume", volume), ("--tank-ml", tank_ml)):
        if ml is not None:
            _within(option, ml, 1e-6, 1e9, "mL above 0")


def _within(option: str, value: float, low: float, high: float, expected: str) -> None:
    if not (math.isfinite(value) and low <= value <= high):
        raise Wrong(f"{option} {value:g}: expected {low:g} to {high:g} {expected}")

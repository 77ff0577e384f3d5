"""`stillbrine salinity`: periods to salinities, with their doubt and what it is made of."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands import Refusal, Wrong, load_bench
from monitor.commands.calibrations import calibration_of, probe_of

if TYPE_CHECKING:
    from monitor.bench import Probe
    from monitor.calibration import Calibration
    from monitor.calibration.calibration import Parts

PART_NAMES = {
    "calibration": "standards and fit",
    "law": "temperature law away from the standards",
    "thermometer": "offset of the thermometer",
    "noise": "noise of the readings",
    "slow_noise": "slow noise, not averaged out",
    "tick": "resolution of one reading",
    "temperature": "temperature not measured",
}


def command(
    period_us: Annotated[
        list[float], typer.Argument(help="Periods in us.", metavar="PERIOD_US...")
    ],
    bench: Annotated[Path, typer.Option(help="The bench file (TOML).")],
    probe: Annotated[str, typer.Option(help="Name of the probe in it.")],
    temp: Annotated[float | None, typer.Option(help="Temperature of the water, C.")] = None,
    readings: Annotated[
        int | None, typer.Option(help="Periods are means of so many readings: add their noise.")
    ] = None,
    budget: Annotated[bool, typer.Option("--budget", help="What the doubt is made of.")] = False,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON object a line.")] = False,
) -> None:
    """Convert periods to salinities, with their doubt.

    Example: stillbrine salinity --bench bench.toml --probe p1 --temp 24.8 585.5
    """
    _check(period_us, temp, readings)
    settings = probe_of(load_bench(bench), probe, bench.name)
    calibration = calibration_of(settings, probe, bench.name)
    for said in calibration.remarks if not as_json else ():
        typer.echo(f"stillbrine: {said}", err=True)
    if temp is None:
        _, noise = temperature_of(settings, calibration, temp)
        typer.echo(
            f"stillbrine: no --temp: {_taken(settings, calibration)}, +- {noise:g} C", err=True
        )
    answers = [answer(calibration, settings, p, temp, readings or 0) for p in period_us]
    for given, parts in answers:
        if as_json:
            typer.echo(json.dumps({**given, "budget": _shares(parts)} if budget else given))
        else:
            typer.echo(in_words(given, calibration.highest_pct))
            typer.echo(budget_in_words(parts, calibration), nl=False) if budget else None
    without = [given for given, _ in answers if given["salinity_pct"] is None]
    if without:
        raise Refusal(f"{len(without)} of {len(answers)} periods: {without[0]['note']}")


def answer(
    calibration: Calibration,
    settings: Probe,
    period_us: float,
    temp_c: float | None,
    readings: int,
) -> tuple[dict[str, Any], Parts]:
    """One period's answer as the fields to print, and its budget.

    Without a temperature that of the bench file is taken, or the standards', with its doubt.
    """
    import numpy as np

    used_c, noise_c = temperature_of(settings, calibration, temp_c)
    offset_c = 0.1 if settings.temp_u_c is None else settings.temp_u_c
    parts = calibration.parts(period_us, used_c, offset_c, noise_c, readings)
    salinity = float(calibration.salinity_pct(np.array([period_us]), np.array([used_c]))[0])
    u95 = 2 * parts.u_pct
    given: dict[str, Any] = {"period_us": period_us, "temp_c": round(used_c, 6)}
    if not math.isfinite(salinity) or not math.isfinite(u95):
        note = no_salinity(calibration, period_us, used_c)
        return {
            **given,
            "salinity_pct": None,
            "u95_pct": None,
            "inside": False,
            "note": note,
        }, parts
    inside = calibration.inside(salinity, u95)
    given |= {"salinity_pct": round(salinity, 9), "u95_pct": round(u95, 9), "inside": inside}
    if not inside:
        given["note"] = _outside(calibration)
    return given, parts


def temperature_of(
    settings: Probe, calibration: Calibration, temp_c: float | None
) -> tuple[float, float]:
    """Temperature to take, C, and what it may be off, C (0 if it was measured)."""
    if temp_c is not None:
        return temp_c, 0.0
    used = calibration.temp_c if settings.temp_c is None else settings.temp_c
    return used, 1.0 if settings.temp_u_c is None else settings.temp_u_c


def no_salinity(calibration: Calibration, period_us: float, temp_c: float) -> str:
    """Why a period holds no salinity; a wrong unit is named."""
    import numpy as np

    for step, unit in ((1e3, "ms"), (1e6, "s")):
        guess = float(calibration.salinity_pct(np.array([period_us * step]), np.array([temp_c]))[0])
        if calibration.lowest_pct / 2 <= guess <= calibration.highest_pct * 2:
            return f"{period_us:g} us looks like {unit}: no salinity; expected us"
    return (
        f"{period_us:g} us is shorter than this probe can be in water it was made for"
        f" (the standards end at {calibration.top_us:g} us): a short, or another unit; expected us"
    )


def in_words(given: dict[str, Any], highest_pct: float) -> str:
    """A line for a person."""
    start = f"{given['period_us']:>10g} us  {given['temp_c']:6.2f} C  "
    if given["salinity_pct"] is None:
        return f"{start}{given['note']}"
    u95, salinity = given["u95_pct"], given["salinity_pct"]
    digits = min(max(1 - math.floor(math.log10(u95)) if u95 > 0 else 4, 4), 7)
    share = f"{100 * u95 / salinity:.2g} % of it" if salinity > 0 else "all of it"
    said = f"{salinity:.{digits}f} % +- {u95:.{digits}f} ({share}; 95 %)"
    return start + said + (f"  {given['note']}" if not given["inside"] else "")


def budget_in_words(parts: Parts, calibration: Calibration) -> str:
    """The parts of the doubt, one a line."""
    if not math.isfinite(parts.u_pct):
        return ""
    lines = [
        f"    {PART_NAMES[name]:<42}{value:.2e} %  {100 * value**2 / parts.u_pct**2:5.1f} % of it\n"
        for name, value in vars(parts).items()
        if value > 0
    ]
    together = f"    {'standard u (shares are of its square)':<42}{parts.u_pct:.2e} %"
    return "".join(lines) + together + _coverage(parts, calibration) + "\n"


def _coverage(parts: Parts, calibration: Calibration) -> str:
    """How u becomes u95, in the GUM's words too (Welch and Satterthwaite, JCGM 100:2008, G.4)."""
    nu = calibration.dof
    if not math.isfinite(nu) or nu <= 2:
        return "; u95 = 2 u"
    from monitor.calibration.student import t_quantile

    fitted = parts.calibration**2 * (nu - 2) / nu  # the GUM's u does not hold the doubt of u
    u = math.sqrt(parts.u_pct**2 - parts.calibration**2 + fitted)
    effective = nu * (u / math.sqrt(fitted)) ** 4
    k = t_quantile(0.975, effective)
    return f"; u95 = 2 u (the GUM's way: {effective:.0f} degrees of freedom, {k:.2f} x {u:.2e} %)"


def _shares(parts: Parts) -> dict[str, float | None]:
    return {
        f"{name}_u_pct": float(f"{value:.6g}") if math.isfinite(value) else None
        for name, value in vars(parts).items()
    }


def _outside(calibration: Calibration) -> str:
    return (
        f"outside the standards ({calibration.lowest_pct:g} to {calibration.highest_pct:g} %):"
        " the doubt grows"
    )


def _taken(settings: Probe, calibration: Calibration) -> str:
    if settings.temp_c is not None:
        return f"{settings.temp_c:g} C of the bench file is taken"
    return f"{calibration.temp_c:.2f} C of the standards is taken"


def _check(period_us: list[float], temp: float | None, readings: int | None) -> None:
    for period in period_us:
        if not (math.isfinite(period) and period > 0):
            raise Wrong(f"PERIOD_US {period:g}: no period; expected us above 0")
    if temp is not None and not -5 <= temp <= 60:
        raise Wrong(f"--temp {temp:g}: outside what water is read at; expected -5 to 60 C")
    if readings is not None and readings < 1:
        raise Wrong(f"--readings {readings}: expected 1 or more")

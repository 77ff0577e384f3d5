"""`stillbrine standards`: what to mix for a calibration, and which levels."""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands import Wrong

if TYPE_CHECKING:
    from monitor.calibration.plan import Mix
    from monitor.water import Medium

SPARE = 1.1  # stock to make for what is needed: rinsing, dead volume


def command(
    stock: Annotated[float, typer.Option(help="Salinity of the stock, % by mass.")],
    each_ml: Annotated[float, typer.Option(help="How much of each standard to make, mL.")],
    levels: Annotated[
        str | None, typer.Option(help="Salinities of the standards, a,b,c in %.")
    ] = None,
    span: Annotated[str, typer.Option(help="Without --levels: from,to in %.")] = "0.025,0.15",
    count: Annotated[int, typer.Option(help="Without --levels: how many.")] = 6,
    aim: Annotated[float | None, typer.Option(help="Where doubt counts most, %.")] = None,
    medium: Annotated[str, typer.Option(help="NaCl or sea salt.")] = "NaCl",
    by: Annotated[str, typer.Option(help="How it is measured out: mass or volume.")] = "mass",
    stock_u: Annotated[float, typer.Option(help="Standard uncertainty of the stock, %.")] = 0.0,
    balance_u: Annotated[float, typer.Option(help="Of one weighing, g.")] = 0.005,
    cylinder_u: Annotated[float, typer.Option(help="Of one cylinder filling, mL.")] = 0.3,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON object a standard.")] = False,
) -> None:
    """Plan standards from a stock and pure water: what to weigh or measure, how well it is known.

    Example: stillbrine standards --stock 1 --each-ml 200 --levels 0.025,0.05,0.1,0.15
    """
    from monitor.calibration.plan import Doubts, even_levels, mix
    from monitor.water import OutOfRangeError
    from monitor.water import medium as medium_of

    try:
        law = medium_of(medium)
    except OutOfRangeError as wrong:
        raise Wrong(f"--medium: {wrong}") from None
    if by not in ("mass", "volume"):
        raise Wrong(f"--by {by[:40]!r}: expected mass or volume")
    for name, value in (
        ("--stock-u", stock_u),
        ("--balance-u", balance_u),
        ("--cylinder-u", cylinder_u),
    ):
        _finite(name, value, 0.0, 1e6)
    _finite("--stock", stock, 1e-6, 26.0, "% by mass (35 g/kg is 3.5)")
    _finite("--each-ml", each_ml, 1e-3, 1e6, "mL above 0")
    if levels is None:
        lowest, highest = _span(span, stock)
        _finite("--count", count, 1, 50)
        chosen = even_levels(lowest, highest, count)
    else:
        chosen = _levels(levels, stock)
    doubts = Doubts(stock_u, balance_u, cylinder_u)
    mixes = [mix(law, stock, each_ml, level, doubts) for level in chosen]
    if as_json:
        for made in mixes:
            typer.echo(json.dumps(_fields(made, by)))
        return
    typer.echo(_table(mixes, by, stock, each_ml), nl=False)
    if aim is not None:
        _finite("--aim", aim, 1e-6, stock)
        typer.echo(_for_aim(law, chosen, aim))


def _fields(made: Mix, by: str) -> dict[str, float]:
    u = made.u_by_mass_pct if by == "mass" else made.u_by_volume_pct
    return {
        "salinity_pct": made.salinity_pct,
        "stock_ml": round(made.stock_ml, 4),
        "water_ml": round(made.water_ml, 4),
        "stock_g": round(made.stock_g, 4),
        "water_g": round(made.water_g, 4),
        "salinity_u95_pct": float(f"{2 * u:.6g}"),
    }


def _table(mixes: list[Mix], by: str, stock: float, each_ml: float) -> str:
    """The plan for a person."""
    lines = [
        f"{each_ml:g} mL of each at 20 C, from a stock of {stock:g} % and pure water, by {by}:",
        "  salinity       stock       water   or    stock       water    +- (95 %)",
    ]
    for made in mixes:
        f = _fields(made, by)
        lines.append(
            f"{made.salinity_pct:>8.4g} %  {made.stock_g:>8.3f} g  {made.water_g:>8.3f} g  "
            f"{made.stock_ml:>7.2f} mL  {made.water_ml:>7.2f} mL  {f['salinity_u95_pct']:>8.2g} %"
        )
    stock_g, water_g = sum(m.stock_g for m in mixes), sum(m.water_g for m in mixes)
    make_g = stock_g * SPARE
    salt_g = make_g * stock / 100
    lines += [
        f"In all: {stock_g:.1f} g of stock, {water_g:.1f} g of water. To make the stock with a"
        f" tenth to spare: {salt_g:.3f} g of dry salt and {make_g - salt_g:.1f} g of water.",
        f"By mass a standard is known to {_relative(mixes, 'u_by_mass_pct')}, by volume to"
        f" {_relative(mixes, 'u_by_volume_pct')}; state half of it as salinity_u_pct.",
    ]
    if any(m.u_stock_pct for m in mixes):
        share = (
            200 * mixes[-1].u_stock_pct / mixes[-1].salinity_pct if mixes[-1].salinity_pct else 0
        )
        lines.append(
            f"The stock's own doubt moves all of them together, by {share:.2g} % of the value:"
            " only a standard of another lot shows it."
        )
    else:
        lines.append("An error of the stock moves every standard alike and shows nowhere.")
    return "\n".join(lines) + "\n"


def _relative(mixes: list[Mix], name: str) -> str:
    shares = [200 * getattr(m, name) / m.salinity_pct for m in mixes if m.salinity_pct > 0]
    return f"{min(shares):.2g} to {max(shares):.2g} % of its value" if shares else "nothing"


def _for_aim(law: Medium, chosen: list[float], aim: float) -> str:
    """What these levels give at the aim, and what others would."""
    from monitor.calibration.plan import best_levels, even_levels, expected_u

    above = [level for level in chosen if level > 0] or [aim]
    low, high, n = min(above), max(above), len(chosen)
    even = even_levels(low, high, n)
    best = best_levels(law, low, high, n, aim)
    at = [aim, *even_levels(low, high, 30)]
    of_chosen, of_even, of_best = (expected_u(law, levels, at) for levels in (chosen, even, best))
    more = expected_u(law, even_levels(low, high, n + 1), at)
    i = int((of_best[1:] / of_even[1:]).argmax()) + 1
    best_text = ", ".join(f"{level:.4g}" for level in best)
    return (
        f"At the aim of {aim:g} % these levels let expect {200 * of_chosen[0]:.2g} % of doubt (95 %"
        f" of cases), evenly spaced ones {200 * of_even[0]:.2g} %.\n"
        f"The best for the aim alone ({best_text}) gain {_change(of_best[0], of_even[0])} there"
        f" over even spacing and lose {_change(of_even[i], of_best[i])} at {at[i]:.3g} %;"
        f" one more even level gains {_change(more[0], of_even[0])} everywhere it counts."
        " Space evenly, ends included, unless only the aim matters."
    )


def _change(smaller: float, larger: float) -> str:
    return f"{100 * (1 - smaller / larger):.0f} %"


def _levels(text: str, stock: float) -> list[float]:
    parts = [part.strip() for part in text.split(",")]
    found = []
    for part in parts:
        try:
            found.append(float(part))
        except ValueError:
            raise Wrong(f"--levels {part[:40]!r}: no number; expected a,b,c in % by mass") from None
        _finite("--levels", found[-1], 0.0, stock, f"0 to the stock's {stock:g} % by mass")
    return found


def _span(text: str, stock: float) -> tuple[float, float]:
    found = _levels(text, stock)
    if len(found) != 2 or not 0 < found[0] < found[1]:
        raise Wrong(
            f"--span {text[:40]!r}: expected from,to in %, the first above 0 and below the second"
        )
    return found[0], found[1]


def _finite(name: str, value: float, low: float, high: float, expected: str = "") -> None:
    if not (math.isfinite(value) and low <= value <= high):
        raise Wrong(f"{name} {value:g}: expected {expected or f'{low:g} to {high:g}'}")

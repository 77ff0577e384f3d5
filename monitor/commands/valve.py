"""`stillbrine valve`: what a valve passes, from timed runs into a cylinder."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands import Refusal, Wrong, load_bench

if TYPE_CHECKING:
    from monitor.dosing.valve import Flow


def command(
    bench: Annotated[Path, typer.Option(help="The bench file (TOML).")],
    valve: Annotated[str, typer.Option(help="Name of the valve in it.")],
    volume: Annotated[
        list[float] | None, typer.Option(help="How long to open for so many mL; may be repeated.")
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON object.")] = False,
) -> None:
    """Find a valve's flow from its timed runs, with its doubt, and what to mistrust in them.

    Example: stillbrine valve --bench bench.toml --valve saline --volume 20
    """
    from monitor.dosing.valve import FlowError, flow

    known = load_bench(bench).valve
    if valve not in known:
        names = ", ".join(sorted(known)) or "none is defined"
        raise Wrong(f"--valve {valve[:40]!r}: not in {bench.name}; expected one of {names}")
    for ml in volume or ():
        if not (math.isfinite(ml) and ml > 0):
            raise Wrong(f"--volume {ml:g}: expected mL above 0")
    try:
        found = flow(known[valve].runs)
    except FlowError as refused:
        raise Refusal(f"valve {valve}: {refused}") from None
    for remark in found.remarks if as_json else ():
        typer.echo(f"stillbrine: valve {valve}: {remark}", err=True)
    if as_json:
        opens = [opening(found, ml) for ml in volume or ()]
        typer.echo(json.dumps({**fields(found), **({"openings": opens} if opens else {})}))
    else:
        typer.echo(in_words(valve, found, volume or []), nl=False)


def fields(flow: Flow) -> dict[str, Any]:
    """The flow's figures for other programs."""
    p = flow.lack_of_fit_p
    return {
        "ml_per_s": _figure(flow.ml_per_s),
        "u95_ml_per_s": _figure(flow.k * flow.u_ml_per_s),
        "offset_ml": _figure(flow.offset_ml),
        "u95_offset_ml": _figure(flow.k * flow.u_offset_ml),
        "runs": flow.runs,
        "lack_of_fit_p": None if p is None else _figure(p),
    }


def opening(flow: Flow, volume_ml: float) -> dict[str, Any]:
    """How long to open for a volume, and the doubt of that."""
    open_s, u = flow.open_s(volume_ml), flow.u_open_s(volume_ml)
    known = math.isfinite(open_s)
    return {
        "volume_ml": volume_ml,
        "open_s": _figure(open_s) if known else None,
        "u95_open_s": _figure(flow.k * u) if known else None,
    }


def _figure(value: float) -> float:
    return float(f"{value:.9g}")


def in_words(name: str, flow: Flow, volumes: list[float]) -> str:
    """The flow for a person."""
    k = flow.k
    lines = [
        f"{name}: {flow.ml_per_s:.4g} +- {k * flow.u_ml_per_s:.2g} mL/s from {flow.runs} runs;"
        f" {flow.offset_ml:+.2g} +- {k * flow.u_offset_ml:.2g} mL besides",
        f"  one run strays by {flow.sd_ml:.2g} mL from its line"
        + _fit_in_words(flow.lack_of_fit_p)
        + f"; doubts at 95 %, k = {k:.2f}",
    ]
    for ml in volumes:
        open_s, u = flow.open_s(ml), flow.u_open_s(ml)
        if math.isfinite(open_s):
            lines.append(f"  {ml:g} mL: open {open_s:.2f} +- {k * u:.2g} s")
        else:
            lines.append(f"  {ml:g} mL: it cannot give so little")
    lines += [f"  ! {remark}" for remark in flow.remarks]
    return "\n".join(lines) + "\n"


def _fit_in_words(p: float | None) -> str:
    if p is None:
        return ""
    return f"; the line {'fits' if p >= 0.05 else 'does not fit'} (p = {p:.2g})"

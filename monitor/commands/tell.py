"""`stillbrine tell ...`: what a person tells a running service, from a command line.

Each is answered once it is in the log of every probe that it concerns.
"""

from __future__ import annotations

import math
import re
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Annotated, Any

import typer

from monitor.commands import Refusal, Wrong

app = typer.Typer(
    help="Tell a running service what was done: a dose, water, a probe taken out, a note.",
    rich_markup_mode=None,
    add_completion=False,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)

_FOR = re.compile(r"([0-9]{1,6}(?:\.[0-9]{1,3})?)(s|m|h)", re.ASCII)
_UNIT_S = {"s": 1.0, "m": 60.0, "h": 3600.0}

BenchFile = Annotated[Path, typer.Option("--bench", help="The bench file (TOML).")]
By = Annotated[str | None, typer.Option("--by", help="Initials of who did it.")]
Ago = Annotated[str, typer.Option("--ago", help="How long ago it happened: 90s, 2m, 1h.")]
ProbeName = Annotated[str | None, typer.Option("--probe", help="Which probe, of several.")]
Why = Annotated[str | None, typer.Option("--why", help="Why.")]


@app.command()
def dose(
    tank: Annotated[str, typer.Argument(help="Name of the tank.")],
    bench: BenchFile,
    liquid: Annotated[str | None, typer.Option(help="What was poured.")] = None,
    volume: Annotated[float | None, typer.Option(help="How much, mL.")] = None,
    volume_u: Annotated[float | None, typer.Option(help="Its standard uncertainty, mL.")] = None,
    valve: Annotated[str | None, typer.Option(help="Or through which valve ...")] = None,
    open_s: Annotated[float | None, typer.Option(help="... and how long it ran in, s.")] = None,
    note: Annotated[str | None, typer.Option(help="A remark.")] = None,
    by: By = None,
    ago: Ago = "0s",
) -> None:
    """Something was dosed. Time counts from when it began to run in.

    Example: stillbrine tell dose t1 --bench bench.toml --liquid saline --volume 52.5 --by ab
    """
    fields = {"tank": tank, "liquid": liquid, "valve": valve, "note": note}
    amounts = {"volume_ml": volume, "volume_u_ml": volume_u, "open_s": open_s}
    _tell(bench, "dose", {**fields, **_amounts(amounts)}, by, ago)


@app.command()
def strike(
    tank: Annotated[str, typer.Argument(help="Name of the tank.")],
    of: Annotated[str, typer.Argument(help="Id of the dose (given when it was told), or TIME.")],
    bench: BenchFile,
    why: Why = None,
    by: By = None,
) -> None:
    """A dose was recorded that was not given."""
    time_s = float(of) if re.fullmatch(r"-?[0-9]{1,9}\.[0-9]{1,6}", of, re.ASCII) else None
    _tell(bench, "strike", {"tank": tank, "of": of if time_s is None else time_s, "why": why}, by)


@app.command()
def water(
    tank: Annotated[str, typer.Argument(help="Name of the tank.")],
    bench: BenchFile,
    out: Annotated[float | None, typer.Option(help="Taken out, mL.")] = None,
    into: Annotated[float | None, typer.Option("--in", help="Put in, mL.")] = None,
    liquid: Annotated[str | None, typer.Option(help="What was put in.")] = None,
    volume: Annotated[float | None, typer.Option(help="Or what the tank holds now, mL.")] = None,
    u: Annotated[float | None, typer.Option(help="Standard uncertainty, mL.")] = None,
    by: By = None,
    ago: Ago = "0s",
) -> None:
    """Water was changed, siphoned or topped up: no dose.

    Example: stillbrine tell water t1 --bench bench.toml --out 200 --in 200 --liquid deionised
    """
    amounts = _amounts({"out_ml": out, "in_ml": into, "volume_ml": volume, "u_ml": u})
    _tell(bench, "water", {"tank": tank, "liquid": liquid, **amounts}, by, ago)


@app.command()
def out(
    bench: BenchFile, probe: ProbeName = None, why: Why = "other", by: By = None, ago: Ago = "0s"
) -> None:
    """A probe is out of its tank (--why wipe, standard, check, move or other)."""
    _tell(bench, "out", {"why": why}, by, ago, probe)


@app.command()
def back(bench: BenchFile, probe: ProbeName = None, by: By = None, ago: Ago = "0s") -> None:
    """It is back."""
    _tell(bench, "back", {}, by, ago, probe)


@app.command()
def note(
    text: Annotated[str, typer.Argument(help="What is to be remembered.")],
    bench: BenchFile,
    probe: ProbeName = None,
    by: By = None,
    ago: Ago = "0s",
) -> None:
    """A note, kept in the log."""
    _tell(bench, "note", {"text": text}, by, ago, probe)


@app.command()
def silence(
    what: Annotated[str, typer.Argument(help="A fault, limit, probe, tank, kind, or `all`.")],
    bench: BenchFile,
    lasts: Annotated[str, typer.Option("--for", help="How long, at most 24h: 30m, 2h.")] = "30m",
    by: By = None,
) -> None:
    """Alarms about something are silent for a while.

    Example: stillbrine tell silence bubbles --bench bench.toml --for 2h --by ab
    """
    until = datetime.now(UTC) + timedelta(seconds=_seconds(lasts, "--for"))
    text = until.strftime("%Y-%m-%dT%H:%M:%SZ")
    _tell(bench, "silence", {"what": what, "until_utc": text}, by)


@app.command()
def answer(
    of: Annotated[str, typer.Argument(help="Which question, such as other-probe.")],
    said: Annotated[str, typer.Argument(help="The answer.")],
    bench: BenchFile,
    from_t: Annotated[float | None, typer.Option(help="Its from_t, of several.")] = None,
    probe: ProbeName = None,
    by: By = None,
) -> None:
    """Answer a question that the service asked."""
    fields = {"of": of, "answer": said, **_amounts({"from_t": from_t})}
    _tell(bench, "answer", fields, by, probe=probe)


@app.command()
def compare(
    salinity: Annotated[float, typer.Argument(help="What another instrument reads, %.")],
    bench: BenchFile,
    u: Annotated[float | None, typer.Option(help="Its standard uncertainty, %.")] = None,
    what: Annotated[str | None, typer.Option(help="Which instrument.")] = None,
    probe: ProbeName = None,
    by: By = None,
    ago: Ago = "0s",
) -> None:
    """Another instrument's reading of the tank."""
    amounts = _amounts({"salinity_pct": salinity, "u_pct": u})
    _tell(bench, "compare", {"what": what, **amounts}, by, ago, probe)


@app.command()
def calibration(
    named: Annotated[str, typer.Argument(help="Name of a set of standards in the bench file.")],
    bench: BenchFile,
    probe: ProbeName = None,
) -> None:
    """Use the calibration of another set of standards from here on."""
    _tell(bench, "calibration", {"set": named}, None, probe=probe)


@app.command()
def reload(bench: BenchFile) -> None:
    """Read the bench file again."""
    _tell(bench, "reload", {}, None)


def _amounts(given: dict[str, float | None]) -> dict[str, float]:
    """What was given of these, checked to be numbers."""
    for name, value in given.items():
        if value is not None and not math.isfinite(value):
            raise Wrong(f"{name}: {value} is no amount; expected a number")
    return {name: value for name, value in given.items() if value is not None}


def _seconds(text: str, option: str) -> float:
    found = _FOR.fullmatch(text)
    if found is None:
        raise Wrong(f"{option}: {text[:40]!r} is no length of time; expected 90s, 2m or 1h")
    return float(found[1]) * _UNIT_S[found[2]]


def _tell(
    bench: Path,
    kind: str,
    fields: dict[str, Any],
    by: str | None,
    ago: str = "0s",
    probe: str | None = None,
) -> None:
    """Give the order; say under which id it stands in the log. Raises Refusal, Wrong."""
    from monitor.control import ControlError, give_now
    from monitor.places import PlaceError, socket_path
    from monitor.printable import printable

    given = {key: value for key, value in {**fields, "by": by}.items() if value is not None}
    more: dict[str, Any] = {"ago_s": _seconds(ago, "--ago")}
    if probe is not None:
        more["probe"] = probe
    try:
        said = give_now(socket_path(bench), kind, given, **more)
    except ControlError as wrong:
        raise Refusal(printable(str(wrong), 400)) from None
    except PlaceError as wrong:
        raise Wrong(str(wrong)) from None
    at = f" at {said['time_s']:.3f} s of the run" if "time_s" in said else ""
    typer.echo(f"recorded: {kind}{at}, id {said['id']}" if at else f"done: {kind}")

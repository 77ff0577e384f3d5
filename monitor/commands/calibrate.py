"""`stillbrine calibrate`: standards from a live probe or a table into the bench file."""

from __future__ import annotations

import re
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands import Refusal, Wrong
from monitor.commands.bench_file import read_bytes, replace, text_of

if TYPE_CHECKING:
    from monitor.bench import Bench
    from monitor.bench import Probe as ProbeSettings
    from monitor.commands.attached import Attached


def command(
    bench: Annotated[Path, typer.Option(help="The bench file (TOML); made if it is not there.")],
    probe: Annotated[str, typer.Option(help="Name of the probe in it.")],
    levels: Annotated[str, typer.Option(help="Salinities of your standards, a,b,c in %.")] = "",
    table: Annotated[
        Path | None, typer.Option("--csv", help="Take readings from this table instead.")
    ] = None,
    readings: Annotated[int, typer.Option(help="Readings to take of each standard.")] = 120,
    lot: Annotated[str | None, typer.Option(help="Lot of the standards, kept with them.")] = None,
    name: Annotated[str | None, typer.Option("--set", help="Name of the new set.")] = None,
    port: Annotated[str | None, typer.Option(help="Port, for a probe not in the file yet.")] = None,
    medium: Annotated[str, typer.Option(help="Medium, for such a probe.")] = "NaCl",
    tick_us: Annotated[float, typer.Option(help="Resolution in us, for such a probe.")] = 1.0,
    by: Annotated[str | None, typer.Option(help="Your initials, for the service's log.")] = None,
) -> None:
    """Take standards with a live probe, fit them, and write them into the bench file.

    Where a service runs on the bench file, it keeps the port: the probe is marked as out of the
    tank, its readings are taken from the log, and the new set is in force at once.

    Type the salinity of the standard that the probe is in, then Enter. `drop` drops the last one,
    `done` ends; Ctrl-C leaves, and the same command goes on where it was left.

    Example: stillbrine calibrate --bench bench.toml --probe p1 --levels 0.025,0.05,0.1,0.15
    """
    from monitor.bench import BenchError, parse
    from monitor.calibration.records import set_name
    from monitor.commands.attached import attached, out_while

    before = read_bytes(bench)
    text = _with_probe(text_of(before, bench), bench, probe, port, medium, tick_us)
    try:
        settings = parse(text, bench.name)
    except BenchError as wrong:
        raise Wrong(str(wrong)) from None
    if not 3 <= readings <= 100_000:
        raise Wrong(f"--readings {readings}: expected 3 to 100000")
    now = datetime.now(UTC)
    new_set = name or set_name(settings, probe, now.date().isoformat())
    if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9_.-]{0,63}", new_set):
        raise Wrong(f"--set {new_set[:64]!r}: expected letters, digits, _ . or -, at most 64")
    service = attached(bench, probe, by)
    with out_while(None if table else service, "standard"):
        taken = (
            _from_table(table)
            if table
            else _live(bench, settings, probe, levels, readings, service)
        )
        for standard in taken:
            standard.setdefault("taken", now.isoformat(timespec="seconds"))
            if lot is not None:
                standard.setdefault("lot", lot)
        _keep(bench, before, text, probe, settings, taken, new_set)
        resume_path(bench, probe).unlink(missing_ok=True)
        if service is not None:
            service.reload()


def _keep(
    bench: Path,
    before: bytes | None,
    text: str,
    probe: str,
    settings: Bench,
    taken: list[dict[str, Any]],
    new_set: str,
) -> None:
    """Fit, show, write. Raises Refusal if there is no fit; then nothing is written."""
    from monitor.bench import BenchError, Standard
    from monitor.calibration import CalibrationError, fit
    from monitor.calibration.picture import picture
    from monitor.calibration.records import with_standards

    of = settings.probe[probe]
    if any(standard.set == new_set for standard in of.standard):
        raise Wrong(f"--set {new_set!r}: there is such a set already; expected a new name")
    try:
        standards = [Standard(**standard) for standard in taken]
        calibration = fit(standards, of.medium, of.tick_us, new_set)
        typer.echo(picture(calibration))
        written = with_standards(text, bench.name, probe, taken, new_set)
    except CalibrationError as wrong:
        raise Refusal(f"nothing written: {wrong}") from None
    except BenchError as wrong:
        raise Refusal(f"nothing written: {wrong}") from None
    replace(bench, before, written)
    typer.echo(f"{len(taken)} standards written into {bench} as set {new_set}")


def resume_path(bench: Path, probe: str) -> Path:
    """Where the standards of a run that was left wait."""
    return bench.with_name(f".{bench.name}.{probe}.calibrate.json")


def _with_probe(
    text: str, bench: Path, probe: str, port: str | None, medium: str, tick_us: float
) -> str:
    """The text, with the probe added if the file has no such probe."""
    import tomllib

    from monitor.bench import NAME
    from monitor.calibration.records import new_bench
    from monitor.water import OutOfRangeError
    from monitor.water import medium as medium_of

    try:
        probes = tomllib.loads(text).get("probe", {})
    except tomllib.TOMLDecodeError as wrong:
        raise Wrong(f"{bench.name}: TOML: {wrong}; expected valid TOML") from None
    if probe in probes:
        return text
    if not NAME.fullmatch(probe):
        raise Wrong(f"--probe {probe[:40]!r}: expected 1 to 32 letters, digits, _ or -")
    if port is None:
        raise Wrong(
            f"{bench.name}: probe {probe}: no such probe; expected one, or --port to add it"
        )
    try:
        medium_of(medium)
    except OutOfRangeError as wrong:
        raise Wrong(f"--medium: {wrong}") from None
    gap = "\n" if text.endswith("\n") else "\n\n"
    return (text + gap if text.strip() else text) + new_bench(probe, port, medium, tick_us)


def _from_table(table: Path) -> list[dict[str, Any]]:
    from monitor.calibration import CalibrationError
    from monitor.calibration.records import standards_from_csv

    try:
        text = table.read_bytes().decode()
        return standards_from_csv(text, table.name)
    except OSError as wrong:
        raise Wrong(f"{table}: {wrong.strerror}; expected a readable table") from None
    except UnicodeDecodeError as wrong:
        raise Wrong(f"{table}: byte {wrong.start}: not UTF-8; expected a table in CSV") from None
    except CalibrationError as wrong:
        raise Wrong(str(wrong)) from None


def _live(
    bench: Path,
    settings: Bench,
    probe: str,
    levels: str,
    readings: int,
    service: Attached | None,
) -> list[dict[str, Any]]:
    """Standards taken with the live probe. Raises Refusal if the run was left."""
    from monitor.commands.guide import Guide

    of: ProbeSettings = settings.probe[probe]
    if of.port is None:
        raise Wrong(f"{bench.name}: probe.{probe}.port: missing; expected a port, or --csv")
    plan = _plan(levels)
    reader = service if service is not None and service.reads else None
    guide = Guide(of, plan, readings, resume_path(bench, probe), reader)
    taken = guide.walk()
    if not taken:
        raise Refusal("no standard taken; nothing written")
    return taken


def _plan(levels: str) -> list[float]:
    found = []
    for part in levels.split(",") if levels else ():
        try:
            found.append(float(part))
        except ValueError:
            raise Wrong(f"--levels {part[:40]!r}: no number; expected a,b,c in % by mass") from None
        if not 0 <= found[-1] <= 26:
            raise Wrong(f"--levels {found[-1]:g}: expected 0 to 26 % by mass")
    return found

"""`stillbrine verify`: a check standard against the calibration, and the history of checks."""

from __future__ import annotations

import json
import math
import os
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands import Refusal, Wrong, load_bench
from monitor.commands.calibrations import calibration_of, probe_of

if TYPE_CHECKING:
    from monitor.bench import Probe
    from monitor.calibration import Calibration
    from monitor.calibration.checks import Check
    from monitor.commands.attached import Attached

HISTORY_MOST = 1_000_000  # bytes
DAY_S = 86400.0


def command(
    bench: Annotated[Path, typer.Option(help="The bench file (TOML).")],
    probe: Annotated[str, typer.Option(help="Name of the probe in it.")],
    salinity: Annotated[float | None, typer.Option(help="What the check standard is, %.")] = None,
    salinity_u: Annotated[float, typer.Option(help="Its standard uncertainty, %.")] = 0.0,
    period: Annotated[
        float | None, typer.Option(help="What it reads, us; without it the probe is read now.")
    ] = None,
    temp: Annotated[float | None, typer.Option(help="At which temperature, C.")] = None,
    readings: Annotated[int, typer.Option(help="The period is a mean of so many.")] = 120,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON object.")] = False,
    by: Annotated[str | None, typer.Option(help="Your initials, for the service's log.")] = None,
) -> None:
    """Compare a check standard with the calibration, keep it, and say what the checks say.

    Where a service runs on the bench file, the reading is taken from its log, with the probe
    marked as out of the tank meanwhile, and the check is written into the log.

    Exit 1 when the probe has moved or a new calibration is due. Without --salinity it only tells
    what the checks so far say.

    Example: stillbrine verify --bench bench.toml --probe p1 --salinity 0.1 --period 374.9 --temp 24
    """
    from monitor.commands.attached import attached, out_while

    settings = probe_of(load_bench(bench), probe, bench.name)
    calibration = calibration_of(settings, probe, bench.name)
    service: Attached | None = None
    if salinity is not None:
        _check(salinity, salinity_u, 1.0 if period is None else period, temp, readings)
        service = attached(bench, probe, by)
    with out_while(service if period is None else None, "check"):
        if salinity is not None:
            if period is None:
                period, temp, readings = _read_now(
                    settings, bench, probe, salinity, readings, service
                )
            made = record(
                calibration, settings, probe, salinity, salinity_u, period, temp, readings
            )
            _append(history_path(bench), {"utc": _now(), **made})
            if service is not None and service.reads:
                service.order("check", _as_event(made))
        told = _tell(
            checks_of(history_path(bench), probe, calibration), probe, calibration, as_json
        )
    if told["moved"] or told["due"]:
        why = "it has moved" if told["moved"] else "a new calibration is due"
        raise Refusal(f"probe {probe}: {why} (stillbrine calibrate)")


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")


def _tell(
    checks: list[Check], probe: str, calibration: Calibration, as_json: bool
) -> dict[str, Any]:
    """Print what the checks say, and give it."""
    told = verdict(checks)
    if as_json:
        typer.echo(json.dumps({"probe": probe, "calibration": calibration.name, **told}))
    else:
        typer.echo("\n".join(in_words(checks, told)))
    return told


def record(
    calibration: Calibration,
    settings: Probe,
    probe: str,
    salinity: float,
    salinity_u: float,
    period: float,
    temp: float | None,
    readings: int,
) -> dict[str, Any]:
    """One check as it is kept. Raises Refusal where the period holds no salinity."""
    import numpy as np

    from monitor.commands.salinity import temperature_of

    used_c, noise_c = temperature_of(settings, calibration, temp)
    offset_c = 0.1 if settings.temp_u_c is None else settings.temp_u_c
    parts = calibration.parts(period, used_c, offset_c, noise_c, readings)
    read = float(calibration.salinity_pct(np.array([period]), np.array([used_c]))[0])
    if not math.isfinite(read) or not math.isfinite(parts.u_pct) or read <= 0:
        raise Refusal(f"{period:g} us holds no salinity by this calibration; expected us")
    fresh = math.hypot(parts.noise, parts.slow_noise, parts.tick, parts.temperature)
    return {
        "probe": probe,
        "calibration": calibration.name,
        "check_pct": salinity,
        "check_u_pct": salinity_u,
        "period_us": period,
        "temp_c": used_c,
        "read_pct": read,
        "read_u_pct": parts.u_pct,
        "noise_u_pct": fresh,
    }


def _as_event(made: dict[str, Any]) -> dict[str, Any]:
    """The check as the log keeps it: what the standard is, and what was read."""
    kept = ("period_us", "temp_c", "read_pct", "read_u_pct")
    return {
        "salinity_pct": made["check_pct"],
        "u_pct": made["check_u_pct"],
        "what": "check standard",
        **{key: made[key] for key in kept},
    }


def verdict(checks: list[Check]) -> dict[str, Any]:
    """What the checks since the calibration say, as fields to print."""
    from monitor.calibration.checks import drift, moved

    last = checks[-1] if checks else None
    found = drift(checks)
    return {
        "checks": len(checks),
        "e_n": None if last is None else round(last.e_n, 3),
        "read_pct": None if last is None else round(last.read_pct, 9),
        "check_pct": None if last is None else last.check_pct,
        "moved": moved(checks),
        "offset_percent": None if found is None else float(f"{100 * found.offset:.4g}"),
        "offset_u_percent": None if found is None else float(f"{100 * found.sd:.4g}"),
        "due": found is not None and found.due,
        "due_in_days": None if found is None else found.due_days,
    }


def in_words(checks: list[Check], told: dict[str, Any]) -> list[str]:
    """The history and the verdict for a person."""
    if not checks:
        return ["no check standard read since this calibration; read one a week"]
    lines = ["   day    standard       reads      off     E_n"]
    for check in checks:
        off = 100 * (check.read_pct / check.check_pct - 1) if check.check_pct > 0 else math.nan
        lines.append(
            f"{check.days:6.1f}  {check.check_pct:8.4g} %  {check.read_pct:8.5f} %"
            f"  {off:+5.2f} %  {check.e_n:+6.2f}"
        )
    if told["moved"]:
        lines.append("The probe has moved since its calibration: clean it, check again, calibrate.")
    elif abs(told["e_n"]) > 1:
        lines.append("This one is outside its doubt: read it, or another one, again.")
    else:
        lines.append("The probe agrees with the check standard within their doubt.")
    if told["offset_percent"] is not None:
        lines.append(_due(told))
    return lines


def _due(told: dict[str, Any]) -> str:
    off = f"offset by all checks {told['offset_percent']:+.2f} +- {told['offset_u_percent']:.2f} %"
    if told["due"]:
        return f"A new calibration is due now: {off}."
    days = told["due_in_days"]
    return f"A new calibration is due in {days:.0f} days without another check: {off}."


def history_path(bench: Path) -> Path:
    """Where the checks of a bench file's probes are kept, one JSON object a line."""
    return bench.with_name(f"{bench.name}.checks.jsonl")


def _append(path: Path, made: dict[str, Any]) -> None:
    try:
        with path.open("ab+") as file:
            file.seek(0, os.SEEK_END)
            if file.tell():
                file.seek(-1, os.SEEK_END)
                if file.read(1) != b"\n":  # the machine died in the middle of a line
                    file.write(b"\n")
            file.write(json.dumps(made).encode() + b"\n")
            file.flush()
            os.fsync(file.fileno())
    except OSError as wrong:
        raise Refusal(f"{path}: cannot be written ({wrong.strerror}); the check is lost") from None


def checks_of(path: Path, probe: str, calibration: Calibration) -> list[Check]:
    """This probe's checks under this calibration, oldest first."""
    from monitor.calibration.checks import Check

    try:
        data = path.read_bytes()[-HISTORY_MOST:]
    except FileNotFoundError:
        return []
    except OSError as wrong:
        raise Wrong(f"{path}: {wrong.strerror}; expected a readable history of checks") from None
    found, spoilt = [], 0
    began = _utc(calibration.date)
    for line in data.decode(errors="replace").splitlines():
        try:
            made = json.loads(line)
            if made["probe"] != probe or made["calibration"] != calibration.name:
                continue
            utc = _utc(made["utc"])
            began = began or utc
            days = (utc - began).total_seconds() / DAY_S if utc and began else 0.0
            names = ("check_pct", "check_u_pct", "read_pct", "read_u_pct", "noise_u_pct")
            found.append(Check(max(days, 0.0), *(float(made[name]) for name in names)))
        except (ValueError, KeyError, TypeError):
            spoilt += 1
    if spoilt:
        typer.echo(f"stillbrine: {path.name}: {spoilt} lines are no check; passed over", err=True)
    return sorted(found, key=lambda check: check.days)


def _utc(text: str | None) -> datetime | None:
    """The time that a text holds; None where it holds none (`taken` is the user's own text)."""
    try:
        when = datetime.fromisoformat(text or "")
    except ValueError:
        return None
    return when if when.tzinfo else when.replace(tzinfo=UTC)


def _read_now(
    settings: Probe,
    bench: Path,
    probe: str,
    salinity: float,
    readings: int,
    service: Attached | None,
) -> tuple[float, float | None, int]:
    """Period, temperature and readings of the check standard, from the live probe."""
    from monitor.commands.guide import Guide

    reader = service if service is not None and service.reads else None
    if settings.port is None:
        raise Wrong(f"{bench.name}: probe.{probe}.port: missing; expected a port, or --period")
    guide = Guide(settings, [salinity], readings, None, reader)
    guide.run.put_in(salinity)
    taken = guide.walk(until=1)
    if not taken:
        raise Refusal("left before the standard was read; nothing kept")
    return taken[0]["period_us"], taken[0].get("temp_c"), taken[0]["readings"]


def _check(
    salinity: float, salinity_u: float, period: float, temp: float | None, readings: int
) -> None:
    if not (0 < salinity <= 26):
        raise Wrong(f"--salinity {salinity:g}: expected % by mass above 0")
    if not (0 <= salinity_u < salinity):
        raise Wrong(f"--salinity-u {salinity_u:g}: expected 0 or more, below the salinity")
    if not (math.isfinite(period) and period > 0):
        raise Wrong(f"--period {period:g}: expected us above 0")
    if temp is not None and not -5 <= temp <= 60:
        raise Wrong(f"--temp {temp:g}: expected -5 to 60 C")
    if readings < 1:
        raise Wrong(f"--readings {readings}: expected 1 or more")

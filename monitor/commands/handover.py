"""`stillbrine handover`: one page of what is open, for whoever comes next."""

from __future__ import annotations

import shutil
import sys
from datetime import datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands import Refusal, Wrong, load_bench
from monitor.commands.report import logs_of_bench

if TYPE_CHECKING:
    from monitor.report.digest import Section


def command(
    bench: Annotated[Path, typer.Option(help="The bench file (TOML).")],
    logs: Annotated[Path | None, typer.Option(help="Folder of the logs.")] = None,
    hours: Annotated[float, typer.Option(help="How far back to look.")] = 12.0,
) -> None:
    """Say what is open: doses not at rest, faults, silences, questions, checks, notes.

    Example: stillbrine handover --bench bench.toml
    """
    from monitor.calibration import CalibrationError
    from monitor.logbook.reader import LogError
    from monitor.report.digest import handover
    from monitor.report.night import gather
    from monitor.report.pages import text

    first = datetime.now().astimezone() - timedelta(hours=hours)
    try:
        night = gather(logs_of_bench(bench, logs, first), None, first)
    except LogError as wrong:
        raise Wrong(str(wrong)) from None
    except CalibrationError as wrong:
        raise Refusal(str(wrong)) from None
    told, due = handover(night), _due(bench)
    columns = min(shutil.get_terminal_size().columns, 100)
    sys.stdout.write(text(night, columns, [*told[:-1], *due, told[-1]], "Hand-over"))


def _due(bench: Path) -> list[Section]:
    """When each probe's calibration is due, by its check standards."""
    from monitor.calibration.checks import drift
    from monitor.commands.calibrations import calibration_of
    from monitor.commands.verify import checks_of, history_path
    from monitor.report.digest import Section

    lines = []
    for name, probe in load_bench(bench).probe.items():
        if not probe.standard:
            lines.append(f"{name}: not calibrated yet (stillbrine calibrate)")
            continue
        calibration = calibration_of(probe, name, bench.name)
        checks = checks_of(history_path(bench), name, calibration)
        found = drift(checks)
        if found is None:
            lines.append(f"{name}: no check standard read since its calibration; read one")
        elif found.due:
            lines.append(f"{name}: a new calibration is due now (stillbrine calibrate)")
        else:
            lines.append(f"{name}: calibration due in {found.due_days:.0f} days")
    return [Section("Checks due", lines)] if lines else []

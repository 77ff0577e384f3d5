"""`stillbrine handover`: one page of what is open, for whoever comes next."""

from __future__ import annotations

import shutil
import sys
from datetime import datetime, timedelta
from pathlib import Path
from typing import Annotated

import typer

from monitor.commands import Refusal, Wrong
from monitor.commands.report import logs_of_bench


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
    columns = min(shutil.get_terminal_size().columns, 100)
    sys.stdout.write(text(night, columns, handover(night)))

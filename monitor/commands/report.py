"""`stillbrine report`: the morning page."""

from __future__ import annotations

import os
import shutil
import sys
from datetime import datetime, timedelta
from functools import partial
from pathlib import Path
from typing import Annotated

import typer

from monitor.commands import Refusal, Wrong, load_bench
from monitor.commands.many import judged, logs_of
from monitor.commands.times import local_time

EVENING_H = 18


def command(
    log: Annotated[
        list[str] | None, typer.Argument(help="Logs and folders of them; else those of the bench.")
    ] = None,
    bench: Annotated[
        Path | None,
        typer.Option(help="The bench file: whose logs; with logs named, judge them by it."),
    ] = None,
    logs: Annotated[Path | None, typer.Option(help="Folder of the logs.")] = None,
    since: Annotated[
        str | None, typer.Option(help="Local time, 2026-03-14T18:00; else yesterday 18:00.")
    ] = None,
    until: Annotated[str | None, typer.Option(help="Local time; else the end.")] = None,
    html: Annotated[Path | None, typer.Option(help="Write the page as one HTML file.")] = None,
    csv: Annotated[Path | None, typer.Option(help="Write minute summaries as CSV.")] = None,
    jobs: Annotated[
        int | None, typer.Option(min=1, help="Processes for many logs; else what is worth it.")
    ] = None,
    dask: Annotated[
        str | None, typer.Option(help="Judge by the workers of this Dask scheduler.")
    ] = None,
) -> None:
    """Say what happened in the night, most important first.

    Made from the logs alone: any past night can be reported, and judged again by another bench.

    Example: stillbrine report --bench bench.toml --html night.html
    """
    from monitor.calibration import CalibrationError
    from monitor.logbook.reader import LogError
    from monitor.report.night import gather
    from monitor.report.pages import page, table, text

    first = local_time(since, "--since")
    last = local_time(until, "--until")
    if log:
        paths, given = logs_of(log), load_bench(bench) if bench else None
    else:
        first = first or _last_evening(datetime.now().astimezone())
        paths, given = logs_of_bench(bench, logs, first), None
    try:
        night = gather(paths, given, first, last, partial(judged, jobs=jobs, dask=dask))
    except LogError as wrong:
        raise Wrong(str(wrong)) from None
    except CalibrationError as wrong:
        raise Refusal(str(wrong)) from None
    for path, content in ((html, page), (csv, table)):
        if path is not None:
            _write(path, content(night))
    sys.stdout.write(text(night, min(shutil.get_terminal_size().columns, 100)))


def _last_evening(now: datetime) -> datetime:
    evening = now.replace(hour=EVENING_H, minute=0, second=0, microsecond=0)
    return evening - timedelta(days=1)


def logs_of_bench(bench: Path | None, logs: Path | None, first: datetime) -> list[str]:
    """The logs of this bench that reach past `first`. Raises Wrong, Refusal."""
    from monitor.logbook.reader import logs_since
    from monitor.places import logs_folder

    if bench is None:
        raise Wrong("report: neither a log nor --bench given; expected one of them")
    folder = logs_folder(load_bench(bench), bench, logs)
    paths = logs_since(folder, first)
    if not paths:
        raise Refusal(f"{folder}: no log since {first:%Y-%m-%d %H:%M}; nothing to report")
    return [str(path) for path in paths]


def _write(path: Path, content: str) -> None:
    try:
        descriptor = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_NOFOLLOW, 0o600)
        with os.fdopen(descriptor, "w", encoding="utf-8") as file:
            file.write(content)
    except OSError as wrong:
        raise Refusal(f"{path}: {wrong.strerror}; expected a file that can be written") from None

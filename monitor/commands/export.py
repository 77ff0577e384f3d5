"""`stillbrine export`: a stretch of a log as CSV, judged."""

from __future__ import annotations

import math
import sys
from datetime import datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands import Refusal, Wrong, load_bench
from monitor.commands.times import local_time

if TYPE_CHECKING:
    from monitor.blocks import Second
    from monitor.chain import Judges

HEAD = "local_time,probe,tank,period_us,temp_c,salinity_pct,u95_pct,belief,readings,events\n"


def command(
    log: Annotated[list[str], typer.Argument(help="Logs, plain or gzipped.", metavar="LOG...")],
    bench: Annotated[Path | None, typer.Option(help="Judge by this bench file.")] = None,
    since: Annotated[str | None, typer.Option(help="Local time, 2026-03-14T18:00.")] = None,
    until: Annotated[str | None, typer.Option(help="Local time.")] = None,
) -> None:
    """Print a stretch of a log as CSV, judged: a row a second.

    Local time, period, temperature, salinity and its doubt (only where the probe was usable),
    belief, events.

    Example: stillbrine export night.log --since 2026-03-14T22:00 > night.csv
    """
    from monitor.calibration import CalibrationError
    from monitor.logbook.reader import LogError
    from monitor.replay import open_logs, replay

    first, last = local_time(since, "--since"), local_time(until, "--until")
    given = load_bench(bench) if bench else None
    zero: list[datetime] = []

    def see(probe: str, offset: float, second: Second, judges: Judges) -> None:
        when = (zero[0] + timedelta(seconds=second.k + offset)).astimezone()
        if (
            (first and when < first)
            or (last and when > last)
            or not (second.n_rows or second.events)
        ):
            return
        sys.stdout.write(_row(when, probe, second, judges))

    try:
        probes = open_logs(log, given, see)
        zero.append(probes[0].zero)
        sys.stdout.write(HEAD)
        for _ in replay(probes):
            pass
    except LogError as wrong:
        raise Wrong(str(wrong)) from None
    except CalibrationError as wrong:
        raise Refusal(str(wrong)) from None


def _row(when: datetime, probe: str, second: Second, judges: Judges) -> str:
    from monitor.printable import cell

    trust = judges.trust
    usable = trust.usable and not trust.out
    events = "; ".join(
        f"{event.kind} at {event.time_s:.3f} s"
        for event in second.events
        if event.kind not in ("alive", "carried")
    )
    cells = [
        when.isoformat(timespec="seconds"),
        probe,
        judges.bench.probe[probe].tank,
        _figure(second.mean_us, 4),
        _figure(second.temp_used_c, 3),
        _figure(second.salinity_pct if usable else math.nan, 6),
        _figure(judges.settling.u95_pct if usable else math.nan, 6),
        "out" if trust.out else trust.belief,
        str(second.n_rows),
        cell(events, 400),
    ]
    return ",".join(cells) + "\n"


def _figure(value: float, digits: int) -> str:
    return f"{value:.{digits}f}" if math.isfinite(value) else ""

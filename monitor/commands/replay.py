"""`stillbrine replay`: recorded logs through the chain that judged them live."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands import Refusal, Wrong, load_bench
from monitor.commands.many import judged, logs_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from monitor.many import JudgedProbe
    from monitor.replay import ProbeReplay


def command(
    log: Annotated[
        list[str],
        typer.Argument(help="Logs, plain or gzipped, and folders of them.", metavar="LOG..."),
    ],
    bench: Annotated[
        Path | None, typer.Option(help="Judge anew by this bench file, not by the log's settings.")
    ] = None,
    findings: Annotated[
        bool, typer.Option("--findings", help="Print the findings as JSON Lines, no screen.")
    ] = False,
    speed: Annotated[float, typer.Option(help="How fast to play on the screen.")] = 60.0,
    probe: Annotated[
        str | None, typer.Option(help="Of a bare capture (numbers only): whose it is.")
    ] = None,
    rate: Annotated[float | None, typer.Option(help="And its readings a second.")] = None,
    against: Annotated[
        Path | None, typer.Option(help="On the screen: once more, judged by this bench file.")
    ] = None,
    beside: Annotated[
        list[str] | None, typer.Option(help="On the screen: this log of another night beside it.")
    ] = None,
    jobs: Annotated[
        int | None, typer.Option(min=1, help="Processes for many logs; else what is worth it.")
    ] = None,
    dask: Annotated[
        str | None, typer.Option(help="Judge by the workers of this Dask scheduler.")
    ] = None,
) -> None:
    """Play recorded logs on the screen, or print what was found in them.

    Example: stillbrine replay night.log.gz --bench bench.toml --findings
    """
    paths = logs_of(log)
    if not findings:
        from monitor.commands.watch import play

        play(paths, bench, speed, probe, rate, against, logs_of(beside or []))
        return
    from monitor.calibration import CalibrationError
    from monitor.findings import line
    from monitor.logbook.reader import LogError
    from monitor.replay import open_logs, replay

    given = load_bench(bench) if bench else None
    probes: Sequence[JudgedProbe | ProbeReplay]
    try:
        if probe is None and (dask or (len(paths) > 1 and jobs != 1)):
            probes = judged(paths, given, jobs=jobs, dask=dask)
        else:
            probes = open_logs(paths, given, bare_probe=probe, bare_rate_hz=rate)
        for batch in replay(probes):
            sys.stdout.write("".join(line(finding) + "\n" for finding in batch))
    except LogError as wrong:
        raise Wrong(str(wrong)) from None
    except CalibrationError as wrong:
        raise Refusal(str(wrong)) from None
    _tell(probes)


def _tell(probes: Sequence[JudgedProbe | ProbeReplay]) -> None:
    """What was dropped, and which settings did not check, on standard error."""
    from monitor.printable import printable

    for probe in probes:
        for what, n in sorted(probe.told.dropped.items()):
            print(f"{probe.probe}: {n} lines dropped: {what}", file=sys.stderr)
        for said in probe.told.messages:
            print(printable(f"{probe.probe}: {said}", 400), file=sys.stderr)

"""`stillbrine run`: the service without a screen."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands import Refusal, Wrong, load_bench

if TYPE_CHECKING:
    from monitor.clock import Clock
    from monitor.service import Service


def command(
    bench: Annotated[Path, typer.Option(help="The bench file (TOML).")],
    logs: Annotated[Path | None, typer.Option(help="Folder of the logs.")] = None,
) -> None:
    """Record and judge every probe of a bench, unattended; findings on standard output.

    Messages go to standard error, readings to the log files only. SIGTERM ends cleanly, SIGHUP
    reads the bench file again.

    Example: stillbrine run --bench bench.toml
    """
    from monitor.clock import HostClock
    from monitor.places import PlaceError, logs_folder
    from monitor.service import ServiceError

    settings = load_bench(bench)
    try:
        serve(bench, logs_folder(settings, bench, logs), HostClock())
    except ServiceError as wrong:
        raise Refusal(str(wrong)) from None
    except PlaceError as wrong:
        raise Wrong(str(wrong)) from None


def serve(bench: Path, folder: Path, clock: Clock) -> None:
    """Run the service of this bench file until a signal ends it.

    Raises ServiceError or Wrong if it cannot start.
    """
    import asyncio

    from monitor import cautions
    from monitor.outlet import Outlet
    from monitor.service import Service
    from monitor.supervisor import kept_awake

    with Outlet() as outlet, kept_awake():
        service = Service(bench, load_bench(bench), folder, clock, outlet.finding, outlet.message)
        for caution in cautions.RUN:
            outlet.message(caution)
        asyncio.run(_until_signalled(service))


async def _until_signalled(service: Service) -> None:
    import asyncio
    import signal

    loop = asyncio.get_running_loop()
    for number in (signal.SIGTERM, signal.SIGINT):
        loop.add_signal_handler(number, service.stop)
    loop.add_signal_handler(signal.SIGHUP, service.reload)
    await service.run()

"""`stillbrine ports`: what is plugged in."""

from __future__ import annotations

from typing import Annotated

import typer


def command(
    listen: Annotated[
        float, typer.Option(help="Listen to each port for so many seconds, and say what comes.")
    ] = 0.0,
    baud: Annotated[int, typer.Option(help="Speed at which to listen.")] = 115200,
) -> None:
    """List the serial ports that are plugged in, by the name that survives a reboot.

    Example: stillbrine ports --listen 3
    """
    from drivers.serial_port import plugged
    from monitor.commands.listening import heard
    from monitor.printable import printable

    found = plugged()
    if not found:
        typer.echo("No serial port is plugged in.")
    for port in found:
        typer.echo(f"{printable(port.by_id or port.device)}  {printable(port.text)}")
        if listen > 0:
            typer.echo(f"    {printable(heard(port.device, baud, listen), 200)}")

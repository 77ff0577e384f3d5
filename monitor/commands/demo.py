"""`stillbrine demo`: the screen on a virtual bench whose tanks, probes and doses are invented."""

from __future__ import annotations

import sys
import tempfile
from pathlib import Path
from typing import Annotated

import typer

from monitor.commands import Wrong, load_bench

FASTEST = 100.0
NOTE = "DEMO: tanks, probes and doses are invented"


def command(
    speed: Annotated[float, typer.Option(help="How fast its time runs.")] = 1.0,
    plain: Annotated[
        bool, typer.Option("--plain", help="Steady text instead of a screen.")
    ] = False,
    light: Annotated[
        bool | None, typer.Option("--light/--dark", help="For a light or a dark terminal.")
    ] = None,
) -> None:
    """Three virtual tanks on real serial lines, recorded and judged like any bench.

    All of it is invented, kept in a temporary folder and removed in the end.

    Example: stillbrine demo --speed 4
    """
    from monitor.commands.child import child
    from monitor.commands.watch import show
    from monitor.places import socket_path
    from monitor.screen.followed import LiveSource

    if not 0 < speed <= FASTEST:
        raise Wrong(f"--speed: {speed:g} is not accepted; expected above 0, at most {FASTEST:g}")
    with tempfile.TemporaryDirectory(prefix="stillbrine-demo-", ignore_cleanup_errors=True) as made:
        folder = Path(made)
        bench = folder / "demo.toml"
        socket = socket_path(bench)
        line = [sys.executable, "-m", "monitor.demo_service", str(folder), f"{speed:g}"]
        with child(line, socket):
            source = LiveSource(load_bench(bench), folder / "logs", socket, bench.name)
            show(source, note=NOTE, plain=plain, light=light)

"""`stillbrine watch`: the screen on a bench that is recorded; and the screen on recorded logs."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands import Refusal, Wrong, load_bench

if TYPE_CHECKING:
    from monitor.bench import Bench
    from monitor.screen.source import Source


def command(
    bench: Annotated[Path, typer.Option(help="The bench file (TOML).")],
    logs: Annotated[Path | None, typer.Option(help="Folder of the logs.")] = None,
    plain: Annotated[
        bool, typer.Option("--plain", help="Steady text instead of a screen.")
    ] = False,
    light: Annotated[
        bool | None, typer.Option("--light/--dark", help="For a light or a dark terminal.")
    ] = None,
    orders: Annotated[
        bool | None, typer.Option("--orders/--no-orders", help="Whether doses can be recorded.")
    ] = None,
    web: Annotated[
        bool, typer.Option("--web", help="In a browser of this machine; no orders by default.")
    ] = False,
    port: Annotated[int, typer.Option(min=1024, max=65535, help="Of --web, on loopback.")] = 8420,
) -> None:
    """Watch a bench: attach to the service that records it, or start one while this is open.

    Example: stillbrine watch --bench bench.toml
    """
    from monitor.places import PlaceError, logs_folder, socket_path

    settings = load_bench(bench)
    try:
        folder, socket = logs_folder(settings, bench, logs), socket_path(bench)
        with recording(settings, bench, folder, socket) as where:
            if web:
                _serve(bench.resolve(), where.resolve(), bool(orders), port)
                return
            from monitor.screen.followed import LiveSource

            source = LiveSource(settings, where, socket, bench.name, orders is not False)
            show(source, plain=plain, light=light)
    except PlaceError as wrong:
        raise Wrong(str(wrong)) from None


def _serve(bench: Path, folder: Path, orders: bool, port: int) -> None:
    """The screen in a browser: every visitor runs this very command. Raises Refusal."""
    from monitor.commands.child import MAIN

    try:
        from monitor.web import Door
    except ImportError:
        raise Refusal("--web needs textual-serve; expected pip install 'stillbrine[web]'") from None
    line = [sys.executable, "-c", MAIN, "watch", "--bench", str(bench), "--logs", str(folder)]
    line.append("--orders" if orders else "--no-orders")
    try:
        Door(line, port, bench.name, lambda said: print(said, file=sys.stderr, flush=True)).open()
    except OSError as wrong:
        raise Refusal(f"--port {port}: {wrong.strerror}; expected one that is free") from None


def play(
    log: Sequence[str],
    bench: Path | None,
    speed: float,
    probe: str | None = None,
    rate_hz: float | None = None,
    against: Path | None = None,
    beside: Sequence[str] = (),
) -> None:
    """Play recorded logs on the screen; lanes marked B are judged by, or read from, the others.

    Raises Wrong, Refusal.
    """
    from monitor.calibration import CalibrationError
    from monitor.logbook.reader import LogError
    from monitor.screen.replayed import SPEED_MOST, ReplaySource

    if not 0 < speed <= SPEED_MOST:
        raise Wrong(f"--speed: {speed:g} is not accepted; expected above 0, at most {SPEED_MOST:g}")
    if against is not None and beside:
        raise Wrong("--against and --beside: both given; expected one of them")
    given, other = (load_bench(path) if path else None for path in (bench, against))
    note = "a recording is played"
    if against is not None or beside:
        note += f"; B: {against.name if against else Path(beside[0]).name}"
    try:
        show(ReplaySource(log, given, speed, probe, rate_hz, other, beside), note)
    except LogError as wrong:
        raise Wrong(str(wrong)) from None
    except CalibrationError as wrong:
        raise Refusal(str(wrong)) from None


def show(source: Source, note: str = "", plain: bool = False, light: bool | None = None) -> None:
    """The source on the screen; as text where it is asked for or nothing else is possible."""
    if plain or not _can_show():
        from monitor.screen import plain as text

        text.run(source, _print, note)
        return
    from monitor.screen.app import run_app

    source.poll()  # the first picture has figures in it
    run_app(source, note=note, light=light)


def _can_show() -> bool:
    """Whether there is a terminal (it is drawn on by standard error), or a browser."""
    if os.environ.get("TEXTUAL_DRIVER"):
        return True
    streams = (sys.stdin, sys.stdout, sys.stderr)
    return all(s.isatty() for s in streams) and os.environ.get("TERM", "dumb") not in ("dumb", "")


def _print(text: str) -> None:
    sys.stdout.write(text)
    sys.stdout.flush()


@contextmanager
def recording(settings: Bench, bench: Path, folder: Path, socket: Path) -> Iterator[Path]:
    """A service that records this bench, while the block lasts; gives the folder of its logs.

    One that runs already is left alone. Raises Refusal or Wrong if none can be started.
    """
    from monitor.commands.child import MAIN, child, status

    answer = status(socket)
    if answer is not None:
        yield _folder_of(answer) or folder
        return
    for name, probe in settings.probe.items():
        if probe.port is None:
            raise Wrong(f"{bench.name}: probe.{name}.port: missing; expected a port to read")
    line = ["run", "--bench", str(bench), "--logs", str(folder)]
    with child([sys.executable, "-c", MAIN, *line], socket):
        yield folder


def _folder_of(answer: dict[str, Any]) -> Path | None:
    """Where a running service writes its logs."""
    probes = answer.get("probes") or {}
    paths = [Path(str(probe["path"])) for probe in probes.values() if probe.get("path")]
    return paths[0].parent if paths else None

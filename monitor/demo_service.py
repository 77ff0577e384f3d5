"""The demo's own process: a virtual bench and the service that records it, on one clock.

`python -m monitor.demo_service FOLDER SPEED`. It ends when it is told to, or when whoever started
it is gone (standard input at its end), and then takes the folder with it.
"""

from __future__ import annotations

import asyncio
import contextlib
import os
import shutil
import signal
import sys
from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from drivers.virtual_tank import demo
from drivers.virtual_tank.bench import Act, VirtualBench
from drivers.virtual_tank.line_out import shelf
from monitor.bench import parse
from monitor.clock import FastClock
from monitor.control import Answer, ControlError, give
from monitor.places import socket_path
from monitor.service import Service

SCHEDULE = "the demo's schedule"


class DemoService(Service):
    """A service whose recorded doses do run into the virtual tank."""

    pours_into: VirtualBench

    async def _ordered(self, message: dict[str, Any]) -> Answer:
        answer = await super()._ordered(message)
        fields = message.get("fields")
        dosed = bool(answer.get("ok")) and message.get("order") == "dose"
        if dosed and isinstance(fields, dict) and fields.get("by") != SCHEDULE:
            self._pour(fields)
        return answer

    def _pour(self, fields: Mapping[str, Any]) -> None:
        liquid, volume_ml = fields.get("liquid"), fields.get("volume_ml")
        if liquid is not None and volume_ml is not None:
            open_s = float(fields.get("open_s") or 0.0)
            self.pours_into.dose(str(fields["tank"]), str(liquid), float(volume_ml), open_s)


async def serve(folder: Path, speed: float) -> bool:
    """Run the demo in this folder until a signal; True if standard input ended before one."""
    clock = FastClock(speed, datetime.now(UTC))
    ports = shelf(folder.name)
    bench, text = demo.build(clock, ports)
    path = folder / "demo.toml"
    path.write_text(text)
    service = DemoService(
        path, parse(text, path.name), folder / "logs", clock, lambda _: None, lambda _: None
    )
    service.pours_into = bench
    loop = asyncio.get_running_loop()
    for number in (signal.SIGTERM, signal.SIGINT, signal.SIGHUP):
        loop.add_signal_handler(number, service.stop)
    alone = asyncio.Event()
    loop.add_reader(sys.stdin, _until_its_end, service, alone)
    around = [asyncio.create_task(bench.run()), asyncio.create_task(_play(bench, path))]
    try:
        await service.run()
    finally:
        loop.remove_reader(sys.stdin)
        for task in around:
            task.cancel()
        await asyncio.gather(*around, return_exceptions=True)
        if ports is not None:
            shutil.rmtree(ports, ignore_errors=True)
    return alone.is_set()


def _until_its_end(service: Service, alone: asyncio.Event) -> None:
    if not os.read(sys.stdin.fileno(), 4096):
        asyncio.get_running_loop().remove_reader(sys.stdin)
        alone.set()
        service.stop()


async def _play(bench: VirtualBench, path: Path) -> None:
    """Lap after lap of what happens; each dose is recorded as it begins."""
    orders: set[asyncio.Task[None]] = set()

    def tell(act: Act) -> None:
        if act.what == "dose":
            order = asyncio.create_task(_record(path, act))
            orders.add(order)
            order.add_done_callback(orders.discard)

    lap = 0
    while True:
        await bench.play(demo.acts(lap), tell)
        lap += 1


async def _record(path: Path, act: Act) -> None:
    fields = {"tank": act.where, **act.figures, "by": SCHEDULE}
    with contextlib.suppress(ControlError):  # the demo is ending
        await give(socket_path(path), "dose", fields)


def main() -> None:
    """Entry point of the demo's process."""
    folder = Path(sys.argv[1])
    if asyncio.run(serve(folder, float(sys.argv[2]))):
        shutil.rmtree(folder, ignore_errors=True)


if __name__ == "__main__":
    main()

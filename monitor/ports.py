"""The ports of the probes: each kept open by a task of its own, whatever happens to it."""

from __future__ import annotations

import asyncio
from collections.abc import Callable

from drivers.serial_port import SerialPort
from monitor.bench import Probe
from monitor.clock import Clock
from monitor.recorder import Recorder

AGAIN_S = 1.0


class Ports:
    """Open ports by the name of their probe."""

    def __init__(
        self,
        clock: Clock,
        say: Callable[[str], None],
        fault: Callable[[BaseException], None],
    ) -> None:
        """`fault` hears of what no port should raise."""
        self._clock = clock
        self._say = say
        self._fault = fault
        self._tasks: dict[str, asyncio.Task[None]] = {}

    def open(self, probe: str, settings: Probe, recorder: Recorder) -> None:
        """Keep this probe's port open for its recorder; the one it had is given back first."""
        assert settings.port is not None

        def down(why: str) -> None:
            self._say(f"{probe}: {why}")
            recorder.link(False)

        port = SerialPort(
            settings.port,
            settings.baud,
            on_bytes=recorder.on_bytes,
            on_up=lambda: recorder.link(True),
            on_down=down,
            clock=self._clock,
            reset_on_open=settings.reset_on_open,
        )
        self._tasks[probe] = asyncio.create_task(self._read(port, self.close(probe)))

    def close(self, probe: str) -> asyncio.Task[None] | None:
        """Give this probe's port back; the task that does so."""
        task = self._tasks.pop(probe, None)
        if task is not None:
            task.cancel()
        return task

    def close_all(self) -> list[asyncio.Task[None]]:
        """Give all ports back; the tasks that do so."""
        return [task for probe in [*self._tasks] if (task := self.close(probe)) is not None]

    async def _read(self, port: SerialPort, before: asyncio.Task[None] | None) -> None:
        if before is not None:
            await asyncio.wait([before])
        while True:
            try:
                await port.run()
            except Exception as wrong:
                self._fault(wrong)
                await asyncio.sleep(AGAIN_S)

"""A few seconds on a port, and one line of what was heard: for `ports` and `check`."""

from __future__ import annotations

import asyncio
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from drivers.line import Reading
    from monitor.bench import Probe

FIRST_BYTES = 12
BOOT_HINT = "a board that starts anew when its port is opened; harmless"
BAUD_HINT = "bytes but no reading: wrong baud? first bytes"


def heard(url: str, baud: int, for_s: float, probe: Probe | None = None) -> str:
    """What a port says within `for_s` seconds, in one line, with what to do where it is wrong.

    `probe`: whose unit the line is in; without one it is taken as us.
    """
    from drivers.serial_port import PortError

    try:
        return asyncio.run(_heard(url, baud, for_s, probe))
    except PortError as wrong:
        return str(wrong)


async def _heard(url: str, baud: int, for_s: float, probe: Probe | None) -> str:
    from drivers.line import Decoder
    from drivers.serial_port import SerialPort
    from monitor.bench import Probe
    from monitor.clock import HostClock

    clock = HostClock()
    decoder = Decoder(probe or Probe(tank="any"))
    first = bytearray()
    readings: list[Reading] = []
    down: list[str] = []
    ups: list[bool] = []

    def came(data: bytes, now_s: float) -> None:
        first.extend(data[: FIRST_BYTES - len(first)])
        readings.extend(decoder.feed(data, now_s))

    def up() -> None:
        ups.append(True)
        decoder.opened(clock.now_s())

    port = SerialPort(url, baud, on_bytes=came, on_up=up, on_down=down.append, clock=clock)
    task = asyncio.create_task(port.run())
    await asyncio.sleep(for_s)
    task.cancel()
    await asyncio.gather(task, return_exceptions=True)
    if not ups:
        return down[0] if down else f"{url}: did not open within {for_s:g} s"
    if not first:
        return "opened, but silent: is the microcontroller running, the probe's lead in?"
    if not readings:
        return f"{BAUD_HINT} {first.hex(' ')}"
    said = f"{len(readings) / for_s:.1f} readings/s, the last {readings[-1].period_us} us"
    if readings[-1].temp_c:
        said += f" at {readings[-1].temp_c} C"
    notes = [*decoder.take_notes(), *(f"{n} lines {why}" for why, n in decoder.counts.items())]
    if decoder.boot_lines > 1:  # the first one may have begun before
        notes.append(f"{decoder.boot_lines} lines at the start were none: {BOOT_HINT}")
    return "; ".join([said, *notes])

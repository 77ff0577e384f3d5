"""A few seconds on a port, and one line of what was heard: for `ports` and `check`."""

from __future__ import annotations

import asyncio

BAUD_HINT = "bytes but no reading: wrong baud? first bytes"


def heard(url: str, baud: int, for_s: float) -> str:
    """What a port says within `for_s` seconds, in one line, with what to do where it is wrong."""
    from drivers.serial_port import PortError

    try:
        return asyncio.run(_heard(url, baud, for_s))
    except PortError as wrong:
        return str(wrong)


async def _heard(url: str, baud: int, for_s: float) -> str:
    from drivers.line import Decoder
    from drivers.serial_port import SerialPort
    from monitor.bench import Probe
    from monitor.clock import HostClock

    data = bytearray()
    down: list[str] = []
    ups: list[bool] = []
    port = SerialPort(
        url,
        baud,
        on_bytes=lambda more, _: data.extend(more[: 65536 - len(data)]),
        on_up=lambda: ups.append(True),
        on_down=down.append,
        clock=HostClock(),
    )
    task = asyncio.create_task(port.run())
    await asyncio.sleep(for_s)
    task.cancel()
    await asyncio.gather(task, return_exceptions=True)
    if not ups:
        return down[0] if down else f"{url}: did not open within {for_s:g} s"
    if not data:
        return "opened, but silent: is the microcontroller running, the probe's lead in?"
    decoder = Decoder(Probe(tank="any"))
    readings = decoder.feed(bytes(data), 1e9)
    if not readings:
        return f"{BAUD_HINT} {bytes(data[:12]).hex(' ')}"
    said = f"{len(readings) / for_s:.1f} readings/s, the last {readings[-1].period_us}"
    if readings[-1].temp_c:
        said += f" at {readings[-1].temp_c} C"
    notes = [*decoder.take_notes(), *(f"{n} lines {why}" for why, n in decoder.counts.items())]
    return "; ".join([said, *notes])

"""The serial port on real pseudo-terminals: noise, unplugging, busy, refused."""

from __future__ import annotations

import asyncio
import contextlib
import os
import random
from collections.abc import AsyncIterator, Callable, Iterator
from types import SimpleNamespace

import pytest

from drivers import serial_port
from drivers.line import Decoder
from drivers.serial_port import PortError, SerialPort, address_from
from drivers.virtual_tank.line_out import LineOut, shelf

WIRE = SimpleNamespace(period_unit="us", tick_hz=None)


class Heard:
    """What a port told, and a decoder behind it."""

    def __init__(self) -> None:
        self.data = b""
        self.n = 0
        self.stamps: list[float] = []
        self.up = 0
        self.down: list[str] = []
        self.decoder = Decoder(WIRE)
        self.rows: list[str] = []

    def now_s(self) -> float:
        return 1000.0 + self.n

    def on_bytes(self, data: bytes, stamp: float) -> None:
        self.n += len(data)
        self.data = (self.data + data)[-200:]
        self.stamps.append(stamp)
        self.rows += [row.period_us for row in self.decoder.feed(data, stamp)]

    def on_up(self) -> None:
        self.up += 1
        self.decoder.opened(-10.0)

    async def opened(self, times: int) -> None:
        await until(lambda: self.up == times)

    async def lost(self, times: int) -> None:
        await until(lambda: sum("unplugged" in why for why in self.down) == times)


async def until(holds: Callable[[], object], limit_s: float = 8.0) -> None:
    """Wait until this holds."""
    async with asyncio.timeout(limit_s):
        while not holds():
            await asyncio.sleep(0.005)


@contextlib.asynccontextmanager
async def reading(url: str, heard: Heard, new_fds: int = 0) -> AsyncIterator[None]:
    """A port that runs; nothing of it may be left behind but what the test itself opened."""
    before = len(os.listdir("/proc/self/fd"))
    port = SerialPort(url, 115200, heard.on_bytes, heard.on_up, heard.down.append, heard)
    task = asyncio.create_task(port.run())
    try:
        yield
    finally:
        task.cancel()
        with contextlib.suppress(asyncio.CancelledError):
            await task
    await asyncio.sleep(0)
    assert len(os.listdir("/proc/self/fd")) == before + new_fds


@pytest.fixture
def line() -> Iterator[LineOut]:
    folder = shelf(f"test-{os.getpid()}")
    if folder is None:
        pytest.skip("no /dev/shm here, so no device name that outlives its device")
    out = LineOut(folder / "p1")
    yield out
    out.unplug()
    folder.rmdir()


async def test_bytes_are_stamped_and_whole(line: LineOut) -> None:
    heard = Heard()
    async with reading(line.path, heard):
        await heard.opened(1)
        line.send(b"254.0,24.81\r\n25")
        line.send(b"5.0\r\n")
        await until(lambda: len(heard.rows) == 2)
    assert heard.rows == ["254.0", "255.0"]
    assert heard.stamps[0] == 1000.0  # the clock it was given, asked before anything else
    assert heard.stamps == sorted(heard.stamps)
    assert heard.down == []


async def test_ten_times_unplugged_and_back_without_a_row_lost(line: LineOut) -> None:
    heard = Heard()
    sent = []
    async with reading(line.path, heard):
        for i in range(10):
            await heard.opened(i + 1)
            for k in range(20):
                sent.append(str(100 * (i + 1) + k))
                line.send(f"{sent[-1]}\n".encode())
            await until(lambda: len(heard.rows) == len(sent))
            line.unplug()
            await heard.lost(i + 1)
            line.plug()
        await until(lambda: heard.up == 11)
    assert heard.rows == sent


async def test_port_that_is_not_there_yet_is_told_once_and_found(line: LineOut) -> None:
    heard = Heard()
    line.unplug()
    async with reading(line.path, heard, new_fds=2):
        await until(lambda: heard.down)
        await asyncio.sleep(0.6)  # several attempts
        line.plug()
        await heard.opened(1)
    assert heard.down == [f"{line.path}: not there; plug it in"]


async def test_noise_of_a_megabyte_and_a_line_without_an_end(line: LineOut) -> None:
    heard = Heard()
    rng = random.Random(5)
    async with reading(line.path, heard):
        await heard.opened(1)
        while heard.n < 1_000_000:
            line.send(rng.randbytes(2000))
            await asyncio.sleep(0.001)
        while heard.n < 1_100_000:
            line.send(b"7" * 2000)
            await asyncio.sleep(0.001)
        line.send(b"\n254\n")
        await until(lambda: heard.rows and heard.rows[-1] == "254")
    assert heard.down == []
    assert heard.decoder.counts["too long"] > 100


async def test_two_readers_never_share_a_port(line: LineOut) -> None:
    first, second = Heard(), Heard()
    async with reading(line.path, first):
        await until(lambda: first.up == 1)
        async with reading(line.path, second):
            await until(lambda: second.down)
            line.send(b"254\n")
            await until(lambda: first.rows == ["254"])
        assert second.down == [f"{line.path}: busy, another program reads it; close that one"]
        assert second.up == 0


async def test_port_given_back_can_be_opened_at_once(line: LineOut) -> None:
    for _ in range(3):
        heard = Heard()
        async with reading(line.path, heard):
            await heard.opened(1)
        assert heard.down == []


async def test_port_served_over_the_network() -> None:
    heard = Heard()
    writers: list[asyncio.StreamWriter] = []

    async def serve(_: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        writers.append(writer)
        writer.write(b"254\n")

    server = await asyncio.start_server(serve, "127.0.0.1", 0)
    port = server.sockets[0].getsockname()[1]
    task = asyncio.create_task(
        SerialPort(
            f"socket://127.0.0.1:{port}",
            9600,
            heard.on_bytes,
            heard.on_up,
            heard.down.append,
            heard,
        ).run()
    )
    await until(lambda: heard.rows == ["254"])
    writers[0].close()
    await until(lambda: heard.rows == ["254", "254"])
    server.close()
    for writer in writers:
        writer.close()
    await until(lambda: "refused" in heard.down[-1])
    task.cancel()
    with pytest.raises(asyncio.CancelledError):
        await task
    await server.wait_closed()


@pytest.mark.parametrize(
    "url",
    [
        "ttyUSB0",
        "COM3",
        "/etc/passwd",
        "/dev/../etc/passwd",
        "/dev/a\0b",
        "/dev/tty\x1b[2J",
        "spy:///dev/ttyUSB0",
        "rfc2217://h:1",
        "socket://h",
        "socket://h:0",
        "socket://h:70000",
        "socket://h:1?logging=debug",
        "socket://h:1/x",
        "file:///dev/ttyUSB0\x1b[2J",
    ],
)
def test_url_that_cannot_be_read_is_refused_in_one_line(url: str) -> None:
    with pytest.raises(PortError) as refused:
        address_from(url)
    assert str(refused.value).isprintable()
    assert "expected /dev/... or socket://host:port" in str(refused.value)


def test_address_of_a_served_port() -> None:
    assert address_from("socket://[::1]:4001") == ("::1", 4001)
    assert address_from("socket://bench.local:4001") == ("bench.local", 4001)
    assert address_from("/dev/serial/by-id/usb-x-if00") is None


@pytest.mark.parametrize(
    ("number", "said"),
    [(13, "usermod -aG"), (11, "busy"), (16, "busy"), (2, "not there"), (None, "cannot be read")],
)
def test_what_is_wrong_with_a_port_is_said_in_one_line(number: int | None, said: str) -> None:
    why = serial_port._why("/dev/null", number)
    assert said in why
    assert "\n" not in why


async def test_device_that_is_no_serial_port_is_named() -> None:
    heard = Heard()
    async with reading("/dev/null", heard):
        await until(lambda: heard.down)
    assert "cannot be read as a serial port" in heard.down[0]

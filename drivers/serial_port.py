"""A serial port, or one served over the network, as bytes with the time of their arrival.

Rules:
- A device below /dev/ or `socket://host:port`; nothing else is opened.
- The port may be missing, refused, busy or pulled out at any time: it is tried again for ever, and
  what is wrong is told once, not at every attempt.
- Two readers never share a port.
- What arrives is stamped at once and handed on; nothing is buffered or looked at here.

The only module that imports pyserial.
"""

from __future__ import annotations

import asyncio
import errno
import fcntl
import grp
import os
import random
import re
import socket
import termios
from collections.abc import Callable
from pathlib import Path
from typing import NamedTuple, Protocol

import serial
import serial.tools.list_ports
import serial_asyncio

RETRY_S = (0.1, 5.0)  # first and longest wait between attempts
CONNECT_S = 5.0
CLOSE_S = 1.0
RESET_S = 0.1
_SOCKET = re.compile(r"socket://([^/\s:\[\]]+|\[[0-9A-Fa-f:.]+\]):(\d{1,5})")


class PortError(Exception):
    """A port cannot be opened (this way, or now); `str()` is the one line to show."""


class Clock(Protocol):
    """Gives the time that readings are stamped with."""

    def now_s(self) -> float: ...


class SerialPort:
    """Keeps one port open for as long as `run` runs."""

    def __init__(
        self,
        url: str,
        baud: int,
        on_bytes: Callable[[bytes, float], None],
        on_up: Callable[[], None],
        on_down: Callable[[str], None],
        clock: Clock,
        reset_on_open: bool = False,
    ) -> None:
        """`on_bytes` gets data and its stamp, `on_down` in one line why there is none.

        Raises
        ------
        PortError
            If `url` is neither a device below /dev/ nor socket://host:port.
        """
        self.url = url
        self._address = address_from(url)
        self._baud = baud
        self._on_bytes = on_bytes
        self._on_up = on_up
        self._on_down = on_down
        self._clock = clock
        self._reset = reset_on_open
        self._told: str | None = None

    async def run(self) -> None:
        """Read until cancelled; then give the port back before the cancellation goes on."""
        wait_s = RETRY_S[0]
        while True:
            try:
                link = await self._open()
            except PortError as wrong:
                self._down(str(wrong))
            else:
                wait_s, self._told = RETRY_S[0], None
                try:
                    self._down(await asyncio.shield(link.lost))
                finally:
                    await link.close()
            await asyncio.sleep(wait_s * random.uniform(0.75, 1.25))
            wait_s = min(2 * wait_s, RETRY_S[1])

    def _down(self, why: str) -> None:
        if why != self._told:
            self._told = why
            self._on_down(why)

    async def _open(self) -> _Link:
        """An open port, or PortError."""
        loop = asyncio.get_running_loop()
        link = _Link(self)
        if self._address is not None:
            try:
                async with asyncio.timeout(CONNECT_S):
                    await loop.create_connection(lambda: link, *self._address)
            except OSError as wrong:  # TimeoutError is one
                why = os.strerror(wrong.errno) if wrong.errno else "no answer"
                raise PortError(f"{self.url}: {why}; tried again") from None
            return link
        device = _opened(self.url, self._baud)
        try:
            if self._reset:
                device.dtr = device.rts = False
                await asyncio.sleep(RESET_S)
                device.dtr = device.rts = True
            await serial_asyncio.connection_for_serial(loop, lambda: link, device)
        except BaseException as wrong:
            device.close()
            if isinstance(wrong, OSError):
                raise PortError(f"{self.url}: gone while it was opened; tried again") from None
            raise
        return link


class _Link(asyncio.Protocol):
    """One opening of a port."""

    def __init__(self, port: SerialPort) -> None:
        self.lost: asyncio.Future[str] = asyncio.get_running_loop().create_future()
        self._port = port
        self._transport: asyncio.BaseTransport | None = None
        self._closing = False

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        self._transport = transport
        if (link := transport.get_extra_info("socket")) is not None:
            _notice_silence(link)
        if self._closing:
            transport.close()
        else:
            self._port._on_up()

    def data_received(self, data: bytes) -> None:
        if not self._closing:
            self._port._on_bytes(data, self._port._clock.now_s())

    def connection_lost(self, exc: Exception | None) -> None:
        if not self.lost.done():
            self.lost.set_result(f"{self._port.url}: unplugged, or its other end closed")

    async def close(self) -> None:
        """Give the port back, within CLOSE_S whatever the driver does."""
        self._closing = True
        if self._transport is None:
            await asyncio.sleep(0)  # opened in this very turn of the loop: let it be made
        if self._transport is None or self.lost.done():
            return
        self._transport.close()
        await asyncio.wait([self.lost], timeout=CLOSE_S)
        if not self.lost.done() and isinstance(self._transport, asyncio.WriteTransport):
            self._transport.abort()


def address_from(url: str) -> tuple[str, int] | None:
    """Host and port of socket://host:port, None for a device. Raises PortError for all else."""
    found = _SOCKET.fullmatch(url)
    if found and 0 < int(found[2]) < 65536:
        return found[1].strip("[]"), int(found[2])
    if not url.startswith("/dev/") or not url.isprintable() or ".." in url.split("/"):
        raise PortError(
            f"port {url[:80]!a}: cannot be read; expected /dev/... or socket://host:port"
        )
    return None


def _notice_silence(link: socket.socket) -> None:
    """A far end that lost its power says nothing: ask it, so that the link is seen to be lost."""
    link.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
    for option, value in (("TCP_KEEPIDLE", 10), ("TCP_KEEPINTVL", 5), ("TCP_KEEPCNT", 3)):
        if hasattr(socket, option):
            link.setsockopt(socket.IPPROTO_TCP, getattr(socket, option), value)


def _opened(path: str, baud: int) -> serial.Serial:
    """The device, locked for this reader alone, its DTR line left as the system gives it."""
    device = serial.Serial(baudrate=baud, timeout=0, exclusive=True, dsrdtr=True)
    device.port = path
    try:
        device.open()
    except (OSError, ValueError) as wrong:
        raise PortError(_why(path, getattr(wrong, "errno", None))) from None
    _keep(device.fileno(), path)
    return device


def _keep(fd: int, path: str) -> None:
    """Others may not open it, and closing it does not reset the microcontroller."""
    try:
        settings = termios.tcgetattr(fd)
        settings[2] &= ~termios.HUPCL
        termios.tcsetattr(fd, termios.TCSANOW, settings)
        if not os.path.realpath(path).startswith("/dev/pts/"):
            # a pseudo-terminal would stay closed to all after a crash: its other end keeps it
            fcntl.ioctl(fd, termios.TIOCEXCL)
    except (OSError, termios.error):
        pass  # some drivers know neither; the lock on the file holds in any case


def _why(path: str, number: int | None) -> str:
    if number in (errno.EAGAIN, errno.EBUSY):
        return f"{path}: busy, {_holder(path)} reads it; close that one"
    if number in (errno.EACCES, errno.EPERM):
        return f"{path}: permission refused; {_group_hint(path)}"
    if number in (errno.ENOENT, errno.ENODEV, errno.ENXIO):
        return f"{path}: not there; plug it in"
    return f"{path}: cannot be read as a serial port ({os.strerror(number or errno.EIO)})"


def _holder(path: str) -> str:
    """The program that has this device open, as far as this user may see."""
    device = os.path.realpath(path)
    for process in Path("/proc").glob("[0-9]*"):
        try:
            if process.name != str(os.getpid()) and any(
                os.readlink(fd) == device for fd in (process / "fd").iterdir()
            ):
                return f"{(process / 'comm').read_text().strip()!a} (process {process.name})"
        except OSError:
            continue  # another user's, or just gone
    return "another program"


def _group_hint(path: str) -> str:
    try:
        group = grp.getgrgid(os.stat(path).st_gid).gr_name
    except (OSError, KeyError):
        return "ask who owns it"
    return f"join its group with 'sudo usermod -aG {group} $USER' and log in again"


class Plugged(NamedTuple):
    """A serial port of this machine. `text` comes from the device: escape it before showing."""

    device: str
    by_id: str | None
    text: str


def plugged() -> list[Plugged]:
    """The serial ports that are plugged in, with the name that stays the same over replugging."""
    links = Path("/dev/serial/by-id")
    names = {os.path.realpath(p): str(p) for p in links.iterdir()} if links.is_dir() else {}
    found = sorted(serial.tools.list_ports.comports(), key=lambda port: port.device)
    return [Plugged(p.device, names.get(p.device), str(p.description)) for p in found]

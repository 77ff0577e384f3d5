"""A pseudo-terminal that a virtual probe speaks through, as a USB serial adapter would."""

from __future__ import annotations

import os
import tty
from pathlib import Path

from drivers.virtual_tank.probe import Readings

SHELF = Path("/dev/shm")  # below /dev, so that its links are device names; writable for everybody


class LineOut:
    """One virtual device: `path` is where to open it, also after it was unplugged and came back.

    What nobody reads is dropped when the system's buffer is full, as a real line drops it.
    """

    def __init__(self, path: Path | None) -> None:
        """`path` becomes a link to the pseudo-terminal; without one it has only its own name."""
        self._link = path
        self._fds: tuple[int, int] | None = None
        self.dropped_bytes = 0
        self.path = ""
        self.plug()

    def plug(self) -> None:
        """Appear; does nothing while plugged in."""
        if self._fds is not None:
            return
        ours, theirs = os.openpty()
        tty.setraw(theirs)  # no echo, no translation, before anybody has opened it
        os.set_blocking(ours, False)
        self._fds = ours, theirs
        self.path = os.ttyname(theirs)
        if self._link is not None:
            fresh = self._link.with_name(self._link.name + ".new")
            fresh.unlink(missing_ok=True)
            fresh.symlink_to(self.path)
            fresh.rename(self._link)
            self.path = str(self._link)

    def unplug(self) -> None:
        """Vanish: who reads it meets the end of the device."""
        if self._fds is None:
            return
        if self._link is not None:
            self._link.unlink(missing_ok=True)
        for fd in self._fds:
            os.close(fd)
        self._fds = None

    def send(self, data: bytes) -> None:
        """Put bytes on the wire, never waiting."""
        if self._fds is None or not data:
            return
        try:
            sent = os.write(self._fds[0], data)
        except BlockingIOError:
            sent = 0
        self.dropped_bytes += len(data) - sent


def shelf(name: str) -> Path | None:
    """A folder of this user alone for links to devices, or None where there is no place for it."""
    folder = SHELF / f"stillbrine-{os.getuid()}-{name}"
    try:
        folder.mkdir(mode=0o700, exist_ok=True)
        found = folder.lstat()
    except OSError:
        return None
    private = found.st_uid == os.getuid() and found.st_mode & 0o777 == 0o700
    return folder if private and folder.is_dir() and not folder.is_symlink() else None


def lines(readings: Readings, tick_us: float) -> bytes:
    """What the microcontroller says: `PERIOD` or `PERIOD,TEMP`, in us, CRLF."""
    digits = max(0, len(f"{tick_us:.9f}".rstrip("0").partition(".")[2]))
    out = []
    for period, temp in zip(readings.period_us.tolist(), readings.temp_c.tolist()):
        shown = "0" if period == 0 else f"{period:.{digits}f}"
        out.append(shown + ("" if temp != temp else f",{temp:.2f}") + "\r\n")
    return "".join(out).encode()

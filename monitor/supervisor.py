"""What the service tells the system it runs on: sd_notify, and that it shall not sleep.

Source: sd_notify(3) of systemd: NOTIFY_SOCKET names an AF_UNIX datagram socket, "@" first for the
abstract namespace; WATCHDOG_USEC is the watchdog's period.
"""

from __future__ import annotations

import os
import shutil
import socket
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager

OURS = ("NOTIFY_SOCKET", "WATCHDOG_USEC", "WATCHDOG_PID")
GO_S = 2.0  # for the inhibitor to end


def notify(state: str) -> bool:
    """Send a state such as "READY=1"; False where nobody asked for it or it cannot be sent."""
    address = os.environ.get("NOTIFY_SOCKET", "")
    if not address.startswith(("/", "@")):
        return False
    if address.startswith("@"):
        address = "\0" + address[1:]
    try:
        with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as to:
            to.sendto(state.encode(), address)
    except OSError:
        return False
    return True


def watchdog_s() -> float | None:
    """How often to send "WATCHDOG=1": half of the period asked for, None where none is."""
    period = os.environ.get("WATCHDOG_USEC", "")
    mine = os.environ.get("WATCHDOG_PID", str(os.getpid())) == str(os.getpid())
    return int(period) / 2e6 if period.isdigit() and int(period) > 0 and mine else None


@contextmanager
def kept_awake() -> Iterator[bool]:
    """Ask that the machine does not go to sleep while the block lasts; whether that was possible.

    However this process ends, its end of the pipe closes and the machine may sleep again.
    Source: systemd-inhibit(1).
    """
    program = shutil.which("systemd-inhibit")
    if program is None:
        yield False
        return
    asked = ["--what=sleep:idle", "--who=stillbrine", "--why=readings are recorded"]
    # it must not speak to our supervisor in our name
    around = {key: value for key, value in os.environ.items() if key not in OURS}
    holder = subprocess.Popen(
        [program, *asked, "--mode=block", "cat"],
        stdin=subprocess.PIPE,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        env=around,
        start_new_session=True,  # the terminal's Ctrl-C is for the service
    )
    try:
        yield True
    finally:
        assert holder.stdin is not None
        holder.stdin.close()
        try:
            holder.wait(GO_S)
        except subprocess.TimeoutExpired:
            holder.kill()
            holder.wait()

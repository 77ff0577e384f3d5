"""What the service tells the program that started it: sd_notify, ten lines over a datagram socket.

Source: sd_notify(3) of systemd: NOTIFY_SOCKET names an AF_UNIX datagram socket, "@" first for the
abstract namespace; WATCHDOG_USEC is the watchdog's period.
"""

from __future__ import annotations

import os
import socket


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

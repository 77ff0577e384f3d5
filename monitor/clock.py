"""The one object through which time enters the service.

A log counts on a clock that no step of the wall clock moves and that goes on while the machine
sleeps. The virtual bench has a clock of its own that may run faster than the host's.
"""

from __future__ import annotations

import time
from datetime import UTC, datetime, timedelta
from typing import Protocol


class HostClock:
    """The host's clocks; a real port always gets this one."""

    speed = 1.0

    def now_s(self) -> float:
        """Seconds on a clock that never steps and counts sleep, from an arbitrary zero."""
        return time.clock_gettime(_BOOT)

    def awake_s(self) -> float:
        """The same without the time that the machine slept."""
        return time.monotonic()

    def utc(self) -> datetime:
        """The wall clock."""
        return datetime.now(UTC)


_BOOT = getattr(time, "CLOCK_BOOTTIME", time.CLOCK_MONOTONIC)


class FastClock:
    """A clock that runs `speed` times as fast as the host's, from `start` on."""

    def __init__(self, speed: float, start: datetime) -> None:
        self.speed = speed
        self._start = start
        self._zero = time.monotonic()

    def now_s(self) -> float:
        """Seconds since the start, of this clock."""
        return (time.monotonic() - self._zero) * self.speed

    awake_s = now_s

    def utc(self) -> datetime:
        """The wall clock of this world."""
        return self._start + timedelta(seconds=self.now_s())


class Clock(Protocol):
    """What the service asks of a clock."""

    @property
    def speed(self) -> float: ...

    def now_s(self) -> float: ...

    def awake_s(self) -> float: ...

    def utc(self) -> datetime: ...

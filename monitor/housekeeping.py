"""The folder of logs over weeks: finished parts packed, old ones removed if asked, space watched.

Rules:
- Only finished parts are touched: never the newest one of a probe, never one being written.
- What is removed is older than the bench file's `keep_days`, and is said. A full disk removes
  nothing: that is for a person to decide.
- Packing and removing run in a thread, so that the recording never waits.
"""

from __future__ import annotations

import asyncio
import os
from collections.abc import Callable, Collection
from datetime import datetime, timedelta
from pathlib import Path

from monitor.bench import Logs
from monitor.clock import Clock
from monitor.logbook.codec import parse_name
from monitor.logbook.writer import compress

LOOK_S = 5.0
TIDY_S = 600.0
NIGHT_S = 14 * 3600.0
RATE_OVER_S = 600.0

Trouble = Callable[[str, str, str | None], None]


class Housekeeping:
    """Looks after one folder of logs."""

    def __init__(
        self, folder: Path, clock: Clock, trouble: Trouble, say: Callable[[str], None]
    ) -> None:
        self.folder = folder
        self._clock = clock
        self._trouble = trouble
        self._say = say
        self._failed: set[str] = set()
        self._rate = Rate()

    async def work(self, logs: Callable[[], Logs], active: Callable[[], Collection[Path]]) -> None:
        """Look now and for ever; `active`: the files being written."""
        since = TIDY_S
        while True:
            self.look(logs())
            if since >= TIDY_S:
                since = 0.0
                await asyncio.to_thread(self.tidy, logs(), active())
            await asyncio.sleep(LOOK_S)
            since += LOOK_S

    def look(self, logs: Logs) -> None:
        """Say when the disk is nearly full, or will be before a night is over."""
        try:
            disk = os.statvfs(self.folder)
        except OSError as wrong:
            self._trouble("", "space", f"{self.folder}: {wrong.strerror}")
            return
        free = disk.f_bavail * disk.f_frsize
        self._trouble("", "space", self._said_of(free, logs.free_mb))

    def _said_of(self, free: int, least_mb: float) -> str | None:
        left_s = self._rate.lasts_s(self._clock.now_s(), free)
        lasts = f", which lasts about {left_s / 3600:.0f} h" if left_s < 48 * 3600 else ""
        if free < least_mb * 1e6:
            return f"{free / 1e6:.0f} MB free for the logs{lasts}; expected {least_mb:g} MB or more"
        if left_s < NIGHT_S:
            return f"{free / 1e6:.0f} MB free for the logs{lasts}; it will not last the night"
        return None

    def tidy(self, logs: Logs, active: Collection[Path]) -> None:
        """Remove what is older than is to be kept, pack what is finished. Blocks."""
        done = finished(self.folder, active)
        if logs.keep_days is not None:
            self._remove(done, self._clock.utc() - timedelta(days=logs.keep_days), logs.keep_days)
        if logs.compress:
            for path in done:
                if path.suffix == ".log" and path.exists():
                    self._pack(path)

    def _pack(self, path: Path) -> None:
        try:
            compress(path)
        except OSError as wrong:
            self._once(f"{path.name}: not packed: {wrong.strerror}")

    def _remove(self, done: list[Path], before: datetime, days: float) -> None:
        for path in [*done, *self.folder.glob("*.findings.jsonl")]:
            try:
                if path.stat().st_mtime >= before.timestamp():
                    continue
                path.unlink()
            except OSError as wrong:
                self._once(f"{path.name}: not removed: {wrong.strerror}")
                continue
            self._say(f"{path.name}: removed, older than {days:g} days (logs.keep_days)")

    def _once(self, text: str) -> None:
        if text not in self._failed:
            self._failed.add(text)
            self._say(text)


class Rate:
    """How fast a disk fills, over the last ten minutes."""

    def __init__(self) -> None:
        self._points: list[tuple[float, int]] = []

    def lasts_s(self, now_s: float, free: int) -> float:
        """Seconds until nothing is free; infinite while that is not known."""
        self._points.append((now_s, free))
        while len(self._points) > 2 and now_s - self._points[1][0] >= RATE_OVER_S:
            self._points.pop(0)
        since_s, was = self._points[0]
        if now_s - since_s < RATE_OVER_S or free >= was:
            return float("inf")
        return free * (now_s - since_s) / (was - free)


def finished(folder: Path, active: Collection[Path]) -> list[Path]:
    """Logs, plain and packed, that nobody writes and that are not the newest of their probe."""
    named = []
    newest: dict[str, tuple[str, int]] = {}
    for path in folder.glob("*.log*"):
        name = parse_name(path.name)
        if name is None or path.is_symlink() or not path.is_file():
            continue
        probe, start, part, _ = name
        newest[probe] = max(newest.get(probe, ("", 0)), (start, part))
        named.append((path, probe, (start, part)))
    return sorted(p for p, probe, at in named if at != newest[probe] and p not in active)

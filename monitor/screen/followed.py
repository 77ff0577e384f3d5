"""Growing logs as a source: what a service records is followed, what a person does is ordered.

A watcher that dies harms nothing; a service that dies is told by its log's silence.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Mapping
from datetime import datetime
from pathlib import Path
from typing import Any

from monitor.bench import Bench
from monitor.control import ControlError, give
from monitor.findings import Finding, in_order
from monitor.logbook import reader
from monitor.screen.growing import Followed
from monitor.screen.source import ActError
from monitor.tanks import UNWATCHED_S, Unwatched
from monitor.view import Lane

BUDGET_S = 0.06  # of a poll
DEAD_S = 15.0  # the service writes a line at least every ten seconds
ASK_S = 5.0
KEPT_S = 2 * UNWATCHED_S  # what an `unwatched` may still ask for


class LiveSource:
    """Follows the logs of a bench, and orders its service."""

    live = True

    def __init__(
        self,
        bench: Bench,
        folder: Path,
        socket: Path,
        name: str = "bench",
        orders: bool = True,
    ) -> None:
        """`folder` of the logs, `socket` of the service, `name` of the bench file.

        `orders`: whether acts may be recorded, or this one only watches.
        """
        self.name = name
        self._orders = orders
        self.lanes = [Lane(probe, bench.for_probe(probe)) for probe in bench.probe]
        self._folder = folder
        self._socket = socket
        self._followed = [Followed(lane, folder) for lane in self.lanes]
        self._tanks: dict[str, Unwatched] = {}
        self._asking: asyncio.Task[None] | None = None
        self._asked = 0.0
        self._told: dict[str, Any] = {}
        self._service = True
        starts = [
            part.header.started
            for lane in self.lanes
            if (part := reader.last_part(folder, lane.probe)) is not None
        ]
        self._known = bool(starts)
        self.started = max(starts) if starts else datetime.now().astimezone()

    @property
    def now_s(self) -> float:
        """The newest time that a log has told, moved on by what has passed since."""
        known = [(lane.t, each.heard) for lane, each in zip(self.lanes, self._followed)]
        told = [t + min(time.monotonic() - heard, DEAD_S) for t, heard in known if t == t]
        if told:
            return max(told)
        return 0.0

    @property
    def trouble(self) -> str:
        """What hinders the recording, in one line; "" while nothing does."""
        following = [each for each in self._followed if each.follower]
        unread = [each.trouble for each in following if each.trouble]
        if unread:
            return unread[0]
        if following and self.caught_up:
            silent = min(time.monotonic() - each.heard for each in following)
            if silent > DEAD_S:
                return f"NOTHING IS RECORDED for {silent:.0f} s: does `stillbrine run` still run?"
        paused = [name for name, told in self._told.items() if told.get("paused")]
        if paused:
            return f"NOT RECORDED: {', '.join(paused)}: {self._told[paused[0]]['paused']}"
        return ""

    @property
    def status(self) -> str:
        """Where the reading stands, in one line; "" while there is nothing to say."""
        if not any(each.follower for each in self._followed):
            return f"no log of {self.name} yet: start `stillbrine run`"
        if not self.caught_up:
            return "reading the log"
        rejected = sum(int(told.get("rejected") or 0) for told in self._told.values())
        return f"{rejected} lines of the wire were no readings" if rejected else ""

    @property
    def caught_up(self) -> bool:
        """Whether all that is written was read."""
        return all(each.caught_up for each in self._followed if each.follower)

    def poll(self) -> None:
        """Read what the logs grew by."""
        found: list[Finding] = []
        share_s = BUDGET_S / max(len(self._followed), 1)
        for each in self._followed:
            if each.stale:
                self._look(each)
            found += each.read(time.monotonic() + share_s)
        self.lanes[:] = [each.lane for each in self._followed]
        found += self._of_tanks()
        for finding in in_order(found):
            for lane in self.lanes:
                lane.hear(finding)
        self._ask()

    def _look(self, each: Followed) -> None:
        if not self._known:
            part = reader.last_part(self._folder, each.lane.probe)
            if part is None:
                each.look(self.started)
                return
            self.started, self._known = part.header.started, True
        each.look(self.started)

    def _of_tanks(self) -> list[Finding]:
        found: list[Finding] = []
        for tank in {lane.tank for lane in self.lanes}:
            its = [each for each in self._followed if each.lane.tank == tank and each.follower]
            if not its or not all(each.caught_up for each in its):
                continue
            spans = [(e.lane.probe, e.follower.chain.watched, e.offset) for e in its if e.follower]
            upto = min(e.follower.chain.closed_t + e.offset for e in its if e.follower)
            fold = self._tanks.setdefault(tank, Unwatched(tank))
            found += fold.advance(upto, spans)
            for _, watched, offset in spans:
                watched.forget(upto - offset - KEPT_S)
        return found

    def _ask(self) -> None:
        """Ask the service how it is, now and then; never wait for it."""
        now = time.monotonic()
        if now - self._asked < ASK_S or (self._asking and not self._asking.done()):
            return
        self._asked = now
        try:
            loop = asyncio.get_running_loop()
        except RuntimeError:
            return  # a text-only watcher has no loop; its log tells
        self._asking = loop.create_task(self._status())

    async def _status(self) -> None:
        try:
            answer = await give(self._socket, "status", {})
        except ControlError:
            self._told = {}
            return
        probes = answer.get("probes")
        self._told = probes if isinstance(probes, dict) else {}

    async def order(
        self, kind: str, fields: Mapping[str, Any], probe: str, ago_s: float = 0.0
    ) -> None:
        """Have the service record an act. Raises ActError."""
        if not self._orders:
            raise ActError("this screen only watches: it was started without --orders")
        try:
            await give(self._socket, kind, fields, probe=probe, ago_s=ago_s)
        except ControlError as wrong:
            raise ActError(str(wrong)) from None

    def close(self) -> None:
        """Ask nothing any more."""
        if self._asking is not None:
            self._asking.cancel()

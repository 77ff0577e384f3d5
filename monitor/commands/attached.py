"""A probe whose port a service reads: its readings from the growing log, a person's orders to it.

Only one program reads a port. Where a service does, a command takes what it needs from the log,
and tells the service what is done with the probe, so that nothing of it is judged as the tank's.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Iterator, Mapping
from contextlib import AbstractContextManager, contextmanager, nullcontext
from datetime import datetime
from pathlib import Path
from typing import Any

import typer

from monitor.commands import Refusal, Wrong

LOOK_S = 0.1
ASK_S = 2.0  # how often the service is asked which file it writes


class Attached:
    """One probe of a running service."""

    def __init__(
        self,
        bench: Path,
        probe: str,
        socket: Path,
        by: str | None,
        state: Mapping[str, Any] | None,
    ) -> None:
        self.probe = probe
        self.state = state  # what the service said of this probe at first; None: not recorded
        self._bench = bench
        self._socket = socket
        self._by = by

    @property
    def reads(self) -> bool:
        """Whether the service has this probe's port."""
        return self.state is not None

    def order(self, kind: str, fields: Mapping[str, Any]) -> None:
        """Give an order about this probe. Raises Refusal."""
        from monitor.control import ControlError, give_now
        from monitor.printable import printable

        by = {"by": self._by} if self._by else {}
        try:
            give_now(self._socket, kind, {**fields, **by}, probe=self.probe)
        except ControlError as wrong:
            raise Refusal(f"the service: {printable(str(wrong), 400)}") from None

    def reload(self) -> None:
        """Have the bench file read again; what comes of it is said, also where it is refused."""
        try:
            self.order("reload", {})
        except Refusal as wrong:
            _say(f"{wrong}; it goes on with the old settings")
        else:
            _say("the running service has taken it: it is in force from here on")

    @contextmanager
    def out_of_the_tank(self, why: str) -> Iterator[None]:
        """The probe is out while the block lasts, until the person says that it is back.

        Raises Refusal if the service does not take the order.
        """
        self.order("out", {"why": why})
        _say(f"a service reads {self.probe}: it is marked as out of the tank from here on")
        try:
            yield
        finally:
            self._put_back()

    def _put_back(self) -> None:
        later = f"stillbrine tell back --bench {self._bench} --probe {self.probe}"
        try:
            _say(f"put {self.probe} back into the tank, then press Enter: ", nl=False)
            input()
            self.order("back", {})
        except (EOFError, KeyboardInterrupt, Refusal):
            _say(f"\n{self.probe} stays marked as out of the tank; once it is back: {later}")
        else:
            _say(f"{self.probe} is back in the tank; it is judged again after its first rest")

    async def follow(
        self,
        reading: Callable[[float, float, float | None], None],
        up: Callable[[], None],
        down: Callable[[str], None],
    ) -> None:
        """Give on each reading (s, us, C) that is written from now on; until cancelled."""
        from monitor.control import ControlError, give

        growing: _Growing | None = None
        while True:
            try:
                said = (await give(self._socket, "status", {}))["probes"][self.probe]
            except (ControlError, KeyError):
                down("the service has ended; waiting for it")
                await asyncio.sleep(ASK_S)
                continue
            path = Path(str(said["path"]))
            if growing is None or growing.path != path:
                growing = _Growing(path, growing)
            up() if said["linked"] else down("the service waits for the port")
            for _ in range(round(ASK_S / LOOK_S)):
                for row in growing.rows():
                    reading(*row)
                await asyncio.sleep(LOOK_S)


class _Growing:
    """Rows that come into one part; its time counted from the first part's `started`."""

    def __init__(self, path: Path, before: _Growing | None) -> None:
        """A part after another is read from its head, the first one from its end."""
        from monitor.logbook.parser import Parser
        from monitor.logbook.reader import Tail

        self.path = path
        self.zero: datetime | None = before.zero if before else None
        self._parser = Parser()
        self._tail = Tail(path)
        self._from_end = before is None

    def rows(self) -> Iterator[tuple[float, float, float | None]]:
        """Those that came since the last time."""
        from monitor.blocks import Block

        while data := self._tail.read():
            header = self._parser.header
            if self._from_end and header is not None:
                continue  # of what is there already, only the head is needed
            items = self._parser.feed(data)
            header = self._parser.header
            if self._from_end or header is None:
                continue
            self.zero = self.zero or header.started
            by = (header.started - self.zero).total_seconds()
            for item in items:
                if isinstance(item, Block):
                    columns = (item.time_s.tolist(), item.period_us.tolist(), item.temp_c.tolist())
                    for t, period_us, temp_c in zip(*columns, strict=True):
                        yield t + by, period_us, temp_c if temp_c == temp_c else None
        self._from_end = False


def attached(bench: Path, probe: str, by: str | None = None) -> Attached | None:
    """The probe as the bench's running service has it; None where none runs. Raises Wrong."""
    from monitor.control import ControlError, give_now
    from monitor.places import PlaceError, socket_path

    try:
        socket = socket_path(bench)
        said = give_now(socket, "status", {}) if socket.exists() else {}
    except PlaceError as wrong:
        raise Wrong(str(wrong)) from None
    except ControlError:
        return None
    if "probes" not in said:
        return None
    return Attached(bench, probe, socket, by, said["probes"].get(probe))


def _say(text: str, nl: bool = True) -> None:
    typer.echo(text, nl=nl, err=True)


def out_while(service: Attached | None, why: str) -> AbstractContextManager[None]:
    """The probe is out of the tank for the block, where a service reads it."""
    if service is None or not service.reads:
        return nullcontext()
    return service.out_of_the_tank(why)

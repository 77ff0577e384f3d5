"""The service's control socket: orders in, an acknowledgement out once the order is in the log.

A Unix socket of mode 0600 in a folder of mode 0700; only the same user is answered. One JSON
object a line, at most 64 KB, within 5 s:
    {"id": "...", "order": "dose", "fields": {...}, "ago_s": 0}  ->  {"id": "...", "ok": true, ...}
An id sent twice is done once and answered the same.
"""

from __future__ import annotations

import asyncio
import json
import os
import socket
import struct
import uuid
from collections import OrderedDict
from collections.abc import Awaitable, Callable, Mapping
from pathlib import Path
from typing import Any

LINE_MOST = 65536
WAIT_S = 5.0
IDS_KEPT = 1000

Answer = dict[str, Any]
Handler = Callable[[dict[str, Any]], Awaitable[Answer]]


class ControlError(RuntimeError):
    """An order could not be given or was refused; `str()` is the one line to show."""


class ControlServer:
    """Listens while it is open; every well-formed order goes to the handler once."""

    def __init__(self, path: Path, handler: Handler) -> None:
        self.path = path
        self._handler = handler
        self._answered: OrderedDict[str, Answer] = OrderedDict()
        self._server: asyncio.Server | None = None
        self._talks: set[asyncio.Task[None]] = set()

    async def open(self) -> None:
        """Begin to listen. A socket left by a killed service is replaced: the lock is its guard."""
        self.path.unlink(missing_ok=True)
        before = os.umask(0o177)
        try:
            self._server = await asyncio.start_unix_server(
                self._accept, str(self.path), limit=LINE_MOST
            )
        finally:
            os.umask(before)

    async def close(self) -> None:
        """Stop listening, drop whoever is connected, remove the socket."""
        if self._server is not None:
            self._server.close()
        for talk in list(self._talks):
            talk.cancel()
        await asyncio.gather(*self._talks, return_exceptions=True)
        self.path.unlink(missing_ok=True)

    async def _accept(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        talk = asyncio.current_task()
        assert talk is not None
        self._talks.add(talk)
        try:
            if _same_user(writer):
                await self._talk(reader, writer)
        except (TimeoutError, ConnectionError, ValueError, asyncio.CancelledError):
            writer.transport.abort()  # slow, vanished or rude: nothing was promised to it
        finally:
            self._talks.discard(talk)
            writer.close()

    async def _talk(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        while line := await asyncio.wait_for(reader.readline(), WAIT_S):
            answer = await self._answer(line)
            writer.write(json.dumps(answer).encode() + b"\n")
            await asyncio.wait_for(writer.drain(), WAIT_S)

    async def _answer(self, line: bytes) -> Answer:
        try:
            order = json.loads(line, parse_constant=_no_constant)
        except (ValueError, RecursionError):
            return {"id": None, "ok": False, "why": "not one JSON object a line"}
        id_ = order.get("id") if isinstance(order, dict) else None
        if not isinstance(id_, str) or not 0 < len(id_) <= 64:
            return {"id": None, "ok": False, "why": "an order needs an id of 1 to 64 characters"}
        if id_ not in self._answered:
            answer = {"id": id_, **await self._handler(order)}
            if not answer.get("ok"):
                return answer  # nothing was done: the same id may try again
            self._answered[id_] = answer
            if len(self._answered) > IDS_KEPT:
                self._answered.popitem(last=False)
        return self._answered[id_]


def _no_constant(name: str) -> Any:
    raise ValueError(f"{name} is no JSON")


def _same_user(writer: asyncio.StreamWriter) -> bool:
    peer = writer.get_extra_info("socket")
    credentials = peer.getsockopt(socket.SOL_SOCKET, socket.SO_PEERCRED, struct.calcsize("3i"))
    return struct.unpack("3i", credentials)[1] in (os.getuid(), 0)


def new_id() -> str:
    """An order's id, never given before."""
    return uuid.uuid4().hex[:16]


async def give(path: Path, order: str, fields: Mapping[str, Any], **more: Any) -> Answer:
    """Give an order to the service at this socket and wait until it is in the log.

    Raises ControlError if there is no service, it does not answer in time, or it refuses.
    """
    message = {"id": new_id(), "order": order, "fields": dict(fields), **more}
    try:
        async with asyncio.timeout(2 * WAIT_S):
            reader, writer = await asyncio.open_unix_connection(str(path), limit=LINE_MOST)
            try:
                writer.write(json.dumps(message).encode() + b"\n")
                await writer.drain()
                line = await reader.readline()
            finally:
                writer.close()
    except (OSError, TimeoutError):
        raise ControlError("no service runs on this bench file; start `stillbrine run`") from None
    if not line:
        raise ControlError("the service closed the connection; expected an answer")
    answer: Answer = json.loads(line)
    if not answer.get("ok"):
        raise ControlError(str(answer.get("why", "refused")))
    return answer


def give_now(path: Path, order: str, fields: Mapping[str, Any], **more: Any) -> Answer:
    """`give` for a program without a loop. Raises ControlError."""
    return asyncio.run(give(path, order, fields, **more))

"""The control socket: an object a line, done once, for the same user only, never waited for."""

from __future__ import annotations

import asyncio
import json
import os
import stat
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any

import pytest

from monitor import control
from monitor.control import Answer, ControlError, ControlServer, give

Streams = tuple[asyncio.StreamReader, asyncio.StreamWriter]


class Handler:
    def __init__(self) -> None:
        self.orders: list[dict[str, Any]] = []
        self.refuse = False

    async def __call__(self, order: dict[str, Any]) -> Answer:
        self.orders.append(order)
        if self.refuse:
            return {"ok": False, "why": "not now"}
        return {"ok": True, "n": len(self.orders)}


@asynccontextmanager
async def served(folder: Path) -> AsyncIterator[tuple[Path, Handler]]:
    handler = Handler()
    server = ControlServer(folder / "c.sock", handler)
    await server.open()
    try:
        yield server.path, handler
    finally:
        await server.close()


@asynccontextmanager
async def connected(path: Path) -> AsyncIterator[Streams]:
    reader, writer = await asyncio.open_unix_connection(str(path))
    try:
        yield reader, writer
    finally:
        writer.transport.abort()


async def say(streams: Streams, data: bytes) -> Any:
    streams[1].write(data + b"\n")
    line = await asyncio.wait_for(streams[0].readline(), 5)
    return json.loads(line) if line else None


async def test_the_socket_is_private_and_gone_afterwards(tmp_path: Path) -> None:
    (tmp_path / "c.sock").write_text("left by one that was killed")
    async with served(tmp_path) as (path, _):
        assert stat.S_IMODE(path.stat().st_mode) == 0o600
        assert (await give(path, "note", {"text": "x"}))["ok"]
    assert not path.exists()


async def test_an_id_sent_twice_is_done_once(tmp_path: Path) -> None:
    async with served(tmp_path) as (path, handler), connected(path) as line:
        order = b'{"id": "a", "order": "dose"}'
        first = await say(line, order)
        assert await say(line, order) == first == {"id": "a", "ok": True, "n": 1}
        async with connected(path) as other:
            assert await say(other, order) == first
        assert len(handler.orders) == 1


async def test_an_order_refused_may_be_tried_again(tmp_path: Path) -> None:
    async with served(tmp_path) as (path, handler), connected(path) as line:
        handler.refuse = True
        assert (await say(line, b'{"id": "a", "order": "dose"}'))["ok"] is False
        handler.refuse = False
        assert (await say(line, b'{"id": "a", "order": "dose"}'))["ok"] is True


@pytest.mark.parametrize(
    "data",
    [
        b"\x1b[2J\x00\xff",
        b"[]",
        b'"x"',
        b"{}",
        b'{"id": 5}',
        b'{"id": ""}',
        b'{"id": "' + b"x" * 65 + b'"}',
        b'{"id": "a", "ago_s": NaN}',
        b"[" * 60_000,
        b'{"id": "a"',
        "\ufeff{}".encode("utf-16"),
    ],
)
async def test_what_is_no_order_is_answered_and_does_nothing(tmp_path: Path, data: bytes) -> None:
    async with served(tmp_path) as (path, handler), connected(path) as line:
        answer = await say(line, data)
        assert answer["ok"] is False
        assert answer["id"] is None
        assert not handler.orders
        assert (await say(line, b'{"id": "good", "order": "x"}'))["ok"] is True


async def test_a_line_too_long_or_a_peer_too_slow_is_dropped(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(control, "WAIT_S", 0.2)
    async with served(tmp_path) as (path, handler), connected(path) as line:
        try:
            assert await say(line, b"x" * (2 * control.LINE_MOST)) is None
        except ConnectionError:
            pass
        async with connected(path) as slow:
            slow[1].write(b'{"id": "half')
            assert await asyncio.wait_for(slow[0].read(), 5) == b""
        assert (await give(path, "note", {}))["ok"]
        assert len(handler.orders) == 1


async def test_a_peer_that_never_reads_is_dropped(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(control, "WAIT_S", 0.3)
    async with served(tmp_path) as (path, handler), connected(path) as (_, writer):
        try:
            async with asyncio.timeout(10):
                while True:
                    writer.write(
                        b'{"id": "%d", "order": "%s"}\n' % (len(handler.orders), b"x" * 99)
                    )
                    await writer.drain()
        except ConnectionError:
            pass
        assert (await give(path, "note", {}))["ok"]


async def test_another_user_is_not_answered(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    async with served(tmp_path) as (path, handler):
        mine = os.getuid()
        monkeypatch.setattr("os.getuid", lambda: 4711)
        if mine == 0:  # root may always
            monkeypatch.setattr("struct.unpack", lambda *_: (1, 4712, 1))
        async with connected(path) as line:
            try:
                assert await say(line, b'{"id": "a", "order": "dose"}') is None
            except ConnectionResetError:
                pass
        assert not handler.orders


async def test_no_service_is_one_line(tmp_path: Path) -> None:
    with pytest.raises(ControlError, match="no service runs on this bench file"):
        await give(tmp_path / "none.sock", "note", {})

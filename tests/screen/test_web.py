"""The door of the screen in a browser: who may come in, and what is served."""

from __future__ import annotations

import asyncio
import sys
from collections.abc import AsyncIterator

import pytest

pytest.importorskip("textual_serve", reason="needs textual-serve, the extra `web`")

from aiohttp import ClientSession, CookieJar, WSMsgType, WSServerHandshakeError, web

from monitor.web import Door

HELLO = (
    "import sys\n"
    "sys.stdout.buffer.write(b'__GANGLION__\\n' + b'D' + (5).to_bytes(4, 'big') + b'hello')\n"
    "sys.stdout.buffer.flush(); sys.stdin.buffer.read(1)"
)


class Served:
    """A door that is open, and what it said."""

    def __init__(self, door: Door, said: list[str], port: int) -> None:
        self.door, self.said = door, said
        self.url = f"http://127.0.0.1:{port}"
        self.origin = {"Origin": self.url}


@pytest.fixture
async def served(unused_tcp_port: int) -> AsyncIterator[Served]:
    said: list[str] = []
    door = Door([sys.executable, "-c", HELLO], unused_tcp_port, "bench<b>.toml", said.append)
    runner = web.AppRunner(await door._make_app())
    await runner.setup()
    await web.TCPSite(runner, "127.0.0.1", unused_tcp_port).start()
    yield Served(door, said, unused_tcp_port)
    await runner.cleanup()
    await asyncio.sleep(0.3)  # a visitor's process is let go of once its end is noticed


@pytest.fixture
async def stranger() -> AsyncIterator[ClientSession]:
    async with ClientSession(cookie_jar=CookieJar(unsafe=True)) as session:
        yield session


@pytest.fixture
async def guest(served: Served, stranger: ClientSession) -> ClientSession:
    """Somebody who has opened the address that was printed."""
    async with stranger.get(f"{served.url}/?token={served.door.token}") as response:
        assert response.status == 200
        assert str(response.url) == f"{served.url}/"  # no token stays in the address
    return stranger


async def status_of(session: ClientSession, url: str, **headers: str) -> int:
    async with session.get(url, headers=headers) as response:
        return response.status


@pytest.mark.parametrize("path", ["/", "/ws", "/static/js/textual.js", "/download/x", "/page.css"])
async def test_without_the_token_nothing_is_served(
    served: Served, stranger: ClientSession, path: str
) -> None:
    assert await status_of(stranger, served.url + path, **served.origin) == 403
    assert await status_of(stranger, served.url + path + "?token=guess") == 403


async def test_a_token_is_good_once(served: Served, guest: ClientSession) -> None:
    used = served.said[0].split("token=")[1].split()[0]
    async with ClientSession() as another:
        assert await status_of(another, f"{served.url}/?token={used}") == 403
    assert len(served.said) == 2
    assert served.door.token in served.said[1]


async def test_another_host_is_refused(served: Served, guest: ClientSession) -> None:
    for host in ("evil.example", "evil.example:80", "127.0.0.1", "127.0.0.1.evil.example"):
        assert await status_of(guest, served.url + "/", Host=host) == 403
        assert await status_of(guest, f"{served.url}/?token={served.door.token}", Host=host) == 403


async def test_another_origin_is_refused(served: Served, guest: ClientSession) -> None:
    for origin in ("http://evil.example", "null", served.url.replace("http", "https")):
        assert await status_of(guest, served.url + "/", Origin=origin) == 403
        with pytest.raises(WSServerHandshakeError, match="403"):
            await guest.ws_connect(served.url + "/ws", headers={"Origin": origin})
    with pytest.raises(WSServerHandshakeError, match="403"):
        await guest.ws_connect(served.url + "/ws")  # none at all


async def test_the_page_holds_nothing_from_elsewhere(served: Served, guest: ClientSession) -> None:
    async with guest.get(served.url + "/") as response:
        text, headers = await response.text(), response.headers
    assert "bench&lt;b&gt;.toml" in text
    assert text.count("http") == 0
    assert "default-src 'none'" in headers["Content-Security-Policy"]
    assert "script-src 'self';" in headers["Content-Security-Policy"]
    assert await status_of(guest, served.url + "/static/js/textual.js") == 200
    assert await status_of(guest, served.url + "/page.css") == 200


async def test_the_cookie_is_for_this_page_alone(served: Served, stranger: ClientSession) -> None:
    url = f"{served.url}/?token={served.door.token}"
    async with stranger.get(url, allow_redirects=False) as response:
        cookie = response.headers["Set-Cookie"]
    assert "HttpOnly" in cookie
    assert "SameSite=Strict" in cookie


async def test_a_guest_gets_the_screens_bytes(served: Served, guest: ClientSession) -> None:
    url = served.url + "/ws?width=80&height=24"
    async with guest.ws_connect(url, headers=served.origin) as socket:
        message = await socket.receive(timeout=10)
    assert (message.type, message.data) == (WSMsgType.BINARY, b"hello")


@pytest.mark.parametrize("size", ["width=100000&height=24", "width=80&height=-1", "width=x"])
async def test_a_terminal_of_no_size_is_refused(
    served: Served, guest: ClientSession, size: str
) -> None:
    with pytest.raises(WSServerHandshakeError, match="400"):
        await guest.ws_connect(f"{served.url}/ws?{size}", headers=served.origin)

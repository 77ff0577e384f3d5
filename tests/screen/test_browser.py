"""The screen in a real browser: it comes up for who has the token, for nobody else."""

from __future__ import annotations

import asyncio
import sys
from collections.abc import AsyncIterator
from pathlib import Path

import pytest

pytest.importorskip("textual_serve", reason="needs textual-serve, the extra `web`")

from aiohttp import web

from monitor.commands.child import MAIN
from monitor.web import Door
from tests.screen import chromium, invented

pytestmark = [
    pytest.mark.browser,
    pytest.mark.slow,
    pytest.mark.skipif(chromium.PATH is None, reason="no Chromium on this machine"),
]


@pytest.fixture
async def door(tmp_path: Path, unused_tcp_port: int) -> AsyncIterator[Door]:
    log = invented.saved(tmp_path, invented.log_text(invented.bench(label="north"), length_s=90.0))
    said: list[str] = []
    line = [sys.executable, "-c", MAIN, "replay", log, "--speed", "3600"]
    door = Door(line, unused_tcp_port, "invented", said.append)
    runner = web.AppRunner(await door._make_app())
    await runner.setup()
    await web.TCPSite(runner, "127.0.0.1", unused_tcp_port).start()
    yield door
    await runner.cleanup()
    await asyncio.sleep(1.0)  # a visitor's process is let go of once its end is noticed


async def test_the_screen_comes_up_with_the_token_alone(door: Door, tmp_path: Path) -> None:
    async with chromium.browser(tmp_path / "profile") as page:
        await page.do("Page.navigate", url=f"http://127.0.0.1:{door.port}/")
        assert await page.until("document.body.innerText.includes('no token')")
        await page.do("Page.navigate", url=f"http://evil.example:{door.port}/?token={door.token}")
        assert await page.until("document.body.innerText.includes('another Host')")
        await page.do("Page.navigate", url=f"http://127.0.0.1:{door.port}/?token={door.token}")
        assert await page.until("document.body.classList.contains('-first-byte')")
        assert await page.ask("location.search") == ""
        assert await page.ask("document.cookie") == ""  # scripts do not see it
        await page.picture(tmp_path / "screen.png")
        await page.do("Page.navigate", url="about:blank")


async def test_another_page_cannot_open_the_socket(door: Door, tmp_path: Path) -> None:
    async with chromium.browser(tmp_path / "profile") as page:
        await page.do("Page.navigate", url=f"http://127.0.0.1:{door.port}/?token={door.token}")
        assert await page.until("document.body.classList.contains('-first-byte')")
        await page.do("Page.navigate", url="about:blank")
        opened = await page.ask(
            "new Promise(done => { const s = new WebSocket("
            f"'ws://127.0.0.1:{door.port}/ws?width=80&height=24');"
            " s.onopen = () => done('open'); s.onerror = () => done('refused'); })"
        )
        assert opened == "refused"

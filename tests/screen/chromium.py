"""A headless Chromium, driven over its debugging socket: open a page, ask it, take its picture."""

from __future__ import annotations

import asyncio
import base64
import shutil
import subprocess
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any

from aiohttp import ClientSession, ClientWebSocketResponse

PATH = shutil.which("chromium") or shutil.which("google-chrome")
_FLAGS = (
    "--headless=new",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-dev-shm-usage",
    "--no-first-run",
    "--disable-background-networking",
    "--remote-debugging-port=0",
    "--remote-allow-origins=*",
    "--host-resolver-rules=MAP evil.example 127.0.0.1",
    "--window-size=1000,640",
)


class Page:
    """One tab."""

    def __init__(self, socket: ClientWebSocketResponse) -> None:
        self._socket = socket
        self._n = 0

    async def do(self, method: str, **params: Any) -> dict[str, Any]:
        """One command of the debugging protocol and its answer."""
        self._n += 1
        await self._socket.send_json({"id": self._n, "method": method, "params": params})
        while True:
            answer = await self._socket.receive_json(timeout=30)
            if answer.get("id") == self._n:
                result: dict[str, Any] = answer.get("result", {})
                return result

    async def ask(self, expression: str) -> Any:
        """What this JavaScript gives."""
        answer = await self.do("Runtime.evaluate", expression=expression, awaitPromise=True)
        return answer.get("result", {}).get("value")

    async def until(self, expression: str, within_s: float = 40.0) -> bool:
        """Whether this becomes true in time."""
        for _ in range(int(within_s / 0.1)):
            if await self.ask(expression):
                return True
            await asyncio.sleep(0.1)
        return False

    async def picture(self, path: Path) -> None:
        """Save what is seen as PNG."""
        answer = await self.do("Page.captureScreenshot")
        path.write_bytes(base64.b64decode(answer["data"]))


@asynccontextmanager
async def browser(folder: Path) -> AsyncIterator[Page]:
    """A browser with one empty tab, its profile in this folder."""
    assert PATH is not None
    process = subprocess.Popen(
        [PATH, *_FLAGS, f"--user-data-dir={folder}", "about:blank"],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    told = folder / "DevToolsActivePort"
    try:
        for _ in range(600):
            if told.exists() and "\n" in told.read_text():
                break
            await asyncio.sleep(0.05)
        port = told.read_text().splitlines()[0]
        async with ClientSession() as session:
            async with session.get(f"http://127.0.0.1:{port}/json") as response:
                tabs = await response.json()
            url = next(tab["webSocketDebuggerUrl"] for tab in tabs if tab["type"] == "page")
            async with session.ws_connect(url, max_msg_size=0) as socket:
                yield Page(socket)
    finally:
        process.terminate()
        process.wait(20)

"""The screen in a browser of this very machine: textual-serve behind a guarded door.

Rules:
- It listens on loopback only. Host must be ours on every request, Origin wherever one is sent and
  always on the socket.
- A token, good once, is exchanged for a cookie (HttpOnly, SameSite=Strict), so that none stays in
  an address; each use prints the next one.
- Every visitor is a process of its own that watches the logs; the ports belong to the service.
"""

from __future__ import annotations

import hmac
import logging
import secrets
import shlex
from collections.abc import Awaitable, Callable, Sequence
from html import escape
from typing import Any

from aiohttp import web
from textual_serve.server import Server

from monitor.printable import printable

HOST = "127.0.0.1"
COOKIE = "stillbrine"
VISITORS_MOST = 4
CELLS_MOST = 500  # columns or rows of a visitor's terminal

_PAGE = """<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><title>{title}</title>
<link rel="stylesheet" href="/static/css/xterm.css"><link rel="stylesheet" href="/page.css">
<script src="/static/js/textual.js"></script></head>
<body><p id="start">stillbrine: waiting for the screen</p>
<div id="terminal" class="textual-terminal" data-session-websocket-url="ws://{host}/ws"
 data-font-size="16"></div></body></html>
"""
_CSS = """html, body { margin: 0; height: 100%; background: #101010; color: #d0d0d0 }
#terminal { width: 100vw; height: 100vh } .-first-byte #start { display: none }
"""
_POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self' 'unsafe-inline'; font-src 'self';"
    " img-src 'self' data:; connect-src ws://{host}; frame-ancestors 'none'; base-uri 'none'"
)

Handler = Callable[[web.Request], Awaitable[web.StreamResponse]]


class Door(Server):
    """Serves one command line to whoever holds the token."""

    def __init__(
        self, command_line: Sequence[str], port: int, title: str, say: Callable[[str], object]
    ) -> None:
        """`say` gets each address to open, a line."""
        super().__init__(shlex.join(command_line), HOST, port, printable(title, 80))
        self.token = ""
        self._cookie = secrets.token_urlsafe(24)
        self._hosts = (f"{HOST}:{port}", f"localhost:{port}")
        self._say = say
        self._visitors = 0

    def open(self) -> None:
        """Serve until a signal comes. Raises OSError if the port is taken."""
        logging.getLogger("textual-serve").addHandler(logging.NullHandler())
        web.run_app(self._make_app(), host=HOST, port=self.port, print=None, access_log=None)

    async def on_startup(self, app: web.Application) -> None:
        """Tell where it is."""
        self._invite()

    def _invite(self) -> None:
        self.token = secrets.token_urlsafe(24)
        self._say(f"open http://{self._hosts[0]}/?token={self.token} (good once)")

    async def _make_app(self) -> web.Application:
        app: web.Application = await super()._make_app()
        app.router.add_get("/page.css", self._css)

        @web.middleware
        async def guard(request: web.Request, handler: Handler) -> web.StreamResponse:
            return await self._guard(request, handler)

        app.middlewares.append(guard)
        return app

    async def _guard(self, request: web.Request, handler: Handler) -> web.StreamResponse:
        host, origin = request.headers.get("Host", ""), request.headers.get("Origin")
        if host not in self._hosts:
            raise web.HTTPForbidden(text="another Host")
        socket = request.path == "/ws"
        if (origin is not None or socket) and origin not in [f"http://{h}" for h in self._hosts]:
            raise web.HTTPForbidden(text="another Origin")
        if request.path == "/" and "token" in request.query:
            return self._exchange(request.query["token"])
        if not hmac.compare_digest(request.cookies.get(COOKIE, "").encode(), self._cookie.encode()):
            raise web.HTTPForbidden(text="no token: open the address that stillbrine printed")
        if socket:
            return await self._visit(request, handler)
        response = await handler(request)
        response.headers["Content-Security-Policy"] = _POLICY.format(host=host)
        response.headers["X-Content-Type-Options"] = "nosniff"
        response.headers["Referrer-Policy"] = "no-referrer"
        return response

    def _exchange(self, token: str) -> web.StreamResponse:
        """The token for the cookie."""
        if not hmac.compare_digest(token.encode(), self.token.encode()):
            raise web.HTTPForbidden(text="this token was used, or never given")
        self._invite()
        response = web.Response(status=303, headers={"Location": "/"})
        response.set_cookie(COOKIE, self._cookie, httponly=True, samesite="Strict", path="/")
        return response

    async def _visit(self, request: web.Request, handler: Handler) -> web.StreamResponse:
        size = [request.query.get(key, "80") for key in ("width", "height")]
        if not all(each.isascii() and each.isdigit() and int(each) <= CELLS_MOST for each in size):
            raise web.HTTPBadRequest(text="no size of a terminal")
        if self._visitors >= VISITORS_MOST:
            raise web.HTTPServiceUnavailable(text="too many visitors")
        self._visitors += 1
        try:
            return await handler(request)
        finally:
            self._visitors -= 1

    async def handle_index(self, request: web.Request) -> Any:
        """The page: our own, without anything from elsewhere."""
        text = _PAGE.format(title=escape(self.title), host=request.headers["Host"])
        return web.Response(text=text, content_type="text/html")

    async def _css(self, request: web.Request) -> web.StreamResponse:
        return web.Response(text=_CSS, content_type="text/css")

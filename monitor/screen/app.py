"""The app: a terminal around the sheet. It polls, draws what changed, takes keys and clicks.

Quitting by q, SIGINT, SIGTERM or SIGHUP leaves the terminal as it was.
"""

from __future__ import annotations

import asyncio
import os
import signal
import time
from datetime import UTC, timedelta, timezone
from typing import ClassVar

from textual import events
from textual.app import App, ComposeResult
from textual.drivers.linux_driver import LinuxDriver
from textual.geometry import Size

from monitor.printable import printable
from monitor.screen import desk, figures, keys, palette, sheet
from monitor.screen.figures import Clock
from monitor.screen.forms import Form
from monitor.screen.look import Look, tanks
from monitor.screen.paper import Paper
from monitor.screen.sheet import Sheet
from monitor.screen.source import ActError, Source
from monitor.screen.terminal import Terminal
from monitor.screen.words import ACT, CALM, DOUBT, Said

POLL_S = 0.25
MESSAGE_S = 12.0
HURRIED_S = 1.0  # how often it is drawn while the source is catching up
ZOOM = 2.0
SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


class Screen(App[None]):
    """stillbrine's dashboard."""

    ENABLE_COMMAND_PALETTE = False
    BINDINGS: ClassVar[list[object]] = []  # type: ignore[assignment]
    CSS = "Screen { overflow: hidden; }"

    def __init__(
        self,
        source: Source,
        note: str = "",
        light: bool | None = None,
        zone: timedelta | None = None,
        colour: bool | None = None,
    ) -> None:
        """`zone`: offset of the local time; None: the machine's. `colour` None: by NO_COLOR."""
        mono = not colour if colour is not None else "NO_COLOR" in os.environ
        super().__init__(ansi_color=mono)
        self.source = source
        self.look = Look(note=printable(note), mono=mono)
        self.paper = Paper()
        self.light = light if light is not None else palette.light_terminal()
        self.sheet = Sheet([])
        self._message_until = 0.0
        self._drawn = 0.0
        self._hurried = False
        self._zone = zone
        self._ordering: asyncio.Task[None] | None = None

    # Life

    def compose(self) -> ComposeResult:
        """The one widget."""
        yield self.paper

    def on_mount(self) -> None:
        """Begin."""
        for number in SIGNALS:
            try:
                asyncio.get_running_loop().add_signal_handler(number, self.exit)
            except (ValueError, RuntimeError, NotImplementedError):
                break  # not in the main thread: whoever runs us has the signals
        self._colour()
        self.set_focus(self.paper)
        self.set_interval(POLL_S, self.tick)
        self.call_after_refresh(self.tick)

    def on_unmount(self) -> None:
        """End."""
        self.source.close()

    def on_resize(self, event: events.Resize) -> None:
        """Another size, another sheet."""
        self.paper.forget()
        self.redraw(event.size)

    def _colour(self) -> None:
        if self.look.mono:
            self.paper.colours = palette.Palette(None)
            self.paper.styles.background = "ansi_default"
            self.paper.styles.color = "ansi_default"
            return
        self.paper.colours = palette.Palette(palette.LIGHT if self.light else palette.DARK)
        page = self.paper.colours.page
        assert page is not None
        self.paper.styles.color, self.paper.styles.background = page
        self.screen.styles.background = page[1]

    @property
    def clock(self) -> Clock:
        """Local time for the source's seconds."""
        started = self.source.started.astimezone(UTC)
        if self._zone is None:
            return Clock(started.astimezone())
        return Clock(started.astimezone(timezone(self._zone)))

    def tick(self) -> None:
        """Four times a second."""
        self.source.poll()
        if not self.source.caught_up:
            self._hurry()
            if time.monotonic() - self._drawn < HURRIED_S:
                return
        if self.look.message is not None and time.monotonic() > self._message_until:
            self.look.message = None
        self.redraw()

    def _hurry(self) -> None:
        """Poll again at once, keys in between."""
        if not self._hurried:
            self._hurried = True
            self.set_timer(0.005, self._poll_again)

    def _poll_again(self) -> None:
        self._hurried = False
        self.tick()

    def redraw(self, size: Size | None = None) -> None:
        """Draw what changed."""
        width, height = size or self.paper.size
        if width < 1 or height < 1:
            return
        self._drawn = time.monotonic()
        self.look.chosen = min(self.look.chosen, max(len(self.source.lanes) - 1, 0))
        self.sheet = sheet.draw(self.source, self.look, width, height, self.clock)
        self.paper.show(self.sheet.rows, width)

    def say(self, text: str, tone: str = CALM) -> None:
        """A message at the foot, for a while."""
        self.look.message = Said(printable(text), tone)
        self._message_until = time.monotonic() + MESSAGE_S

    # Keys

    def on_key(self, event: events.Key) -> None:
        """Every key."""
        event.stop()
        if event.key == "ctrl+c":
            self.exit()
            return
        if self.look.helping:
            self.look.helping = False
        elif self.look.form is not None:
            self._form_key(event)
        else:
            self.act(keys.ACTS.get(event.key) or keys.ACTS.get(event.character or "", ""))
        self.redraw()

    def act(self, name: str) -> None:
        """Do what a key or a click means."""
        look = self.look
        if name.startswith("tank "):
            look.chosen = int(name[5:])
        elif name in desk.NAMES:
            self._begin(name)
        elif name in ("closer", "wider"):
            look.zoom(1.0 / ZOOM if name == "closer" else ZOOM)
        elif name in ("left", "right", "far-left", "far-right"):
            cells = (10 if "far" in name else 1) * (-1 if "left" in name else 1)
            look.pan(cells, self.sheet.on, self.source.now_s)
        elif name in ("up", "down"):
            self._choose(-1 if name == "up" else 1)
        elif name == "now":
            look.end_t = look.cursor_t = None
        elif name == "cursor":
            look.cursor_t = None if look.cursor_t is not None else self.source.now_s
        elif name == "unit":
            at = figures.UNITS.index(look.unit)
            look.unit = figures.UNITS[(at + 1) % len(figures.UNITS)]
        elif name == "order":
            look.worst_first = not look.worst_first
        elif name == "light":
            self.light = not self.light
            self._colour()
            self.paper.forget()
        elif name == "help":
            look.helping = True
        elif name == "escape":
            look.cursor_t = look.message = None
        elif name == "quit":
            self.exit()
        elif name in ("pause", "faster", "slower", "next", "start"):
            self._drive(name)

    def _choose(self, by: int) -> None:
        known = tanks(self.source, self.look, self.clock)
        if not known:
            return
        at = next((i for i, tank in enumerate(known) if tank.place == self.look.chosen), 0)
        self.look.chosen = known[min(max(at + by, 0), len(known) - 1)].place

    def _drive(self, name: str) -> None:
        source = self.source
        if not hasattr(source, "seek"):
            return
        if name == "pause":
            source.playing = not source.playing  # type: ignore[attr-defined]
        elif name == "next":
            source.next_finding()  # type: ignore[attr-defined]
        elif name == "start":
            source.seek(0.0)
        else:
            by = 2.0 if name == "faster" else 0.5
            source.speed = min(max(source.speed * by, 0.25), 3600.0)  # type: ignore[attr-defined]

    # Acts

    def _begin(self, name: str) -> None:
        if not self.source.lanes:
            return
        lane = self.source.lanes[self.look.chosen]
        self.look.end_t = self.look.cursor_t = self.look.message = None
        made = desk.form(name, lane, self.clock, self._utc_in)
        if made is None:
            self.say(desk.NOTHING[name], DOUBT)
        self.look.form = made

    def _utc_in(self, seconds: float) -> str:
        ahead = self.source.started + timedelta(seconds=self.source.now_s + seconds)
        return f"{ahead.astimezone(UTC):%Y-%m-%dT%H:%M:%SZ}"

    def _form_key(self, event: events.Key) -> None:
        form = self.look.form
        assert form is not None
        if event.key == "escape":
            self.look.form = None
        elif event.key == "enter":
            self._record()
        else:
            form.press(event.key, event.character)

    def _record(self) -> None:
        """Order what the form says, once."""
        form = self.look.form
        if form is None or (self._ordering is not None and not self._ordering.done()):
            return
        lane = self.source.lanes[self.look.chosen]
        told = form.preview(lane)
        if told.order is None or told.wrong:
            return
        kind, fields = told.order
        self.look.form = None
        self.say(f"recording {form.title} ...")
        self._ordering = asyncio.create_task(
            self._order(form, kind, fields, lane.probe, told.ago_s)
        )

    async def _order(
        self, form: Form, kind: str, fields: dict[str, object], probe: str, ago_s: float
    ) -> None:
        try:
            await self.source.order(kind, fields, probe, ago_s)
        except ActError as wrong:
            self.look.form = form
            self.say(f"NOT RECORDED: {wrong}", ACT)
        else:
            self.say(f"recorded: {form.title}")
        self.redraw()

    # Mouse

    def on_click(self, event: events.Click) -> None:
        """A click."""
        self.clicked(event.x, event.y)
        self.redraw()

    def clicked(self, x: int, y: int) -> None:
        """Do what stands at this place."""
        for hit in self.sheet.hits:
            if hit.row == y and hit.first <= x <= hit.last:
                self._clicked(hit, x)
                return

    def _clicked(self, hit: sheet.Hit, x: int) -> None:
        if hit.act == "plot":
            if self.sheet.on is not None and self.look.form is None:
                t = self.sheet.on.time(x - hit.first)
                self.look.cursor_t = min(t, self.source.now_s)
        elif hit.act == "enter":
            self._record()
        elif hit.act == "esc":
            self.look.form = None
        else:
            self.act(hit.act)

    def on_mouse_scroll_up(self) -> None:
        """The wheel zooms."""
        self.act("closer")
        self.redraw()

    def on_mouse_scroll_down(self) -> None:
        """And back."""
        self.act("wider")
        self.redraw()


def run_app(source: Source, *, note: str = "", light: bool | None = None) -> None:
    """Show the source's lanes until the person leaves.

    `note` : one line kept in sight, as that all data is invented
    `light` : on white; None: as the terminal says
    """
    app = Screen(source, note, light)
    if app.driver_class is LinuxDriver:
        app.driver_class = Terminal
    app.run()

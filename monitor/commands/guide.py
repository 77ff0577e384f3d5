"""The guided run at a terminal: the port's readings and the person's words into a GuidedRun."""

from __future__ import annotations

import asyncio
import contextlib
import json
import os
import signal
import sys
from collections.abc import Coroutine, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from drivers.line import Decoder
from drivers.serial_port import PortError, SerialPort
from monitor.calibration.guided import GuidedRun
from monitor.clock import HostClock
from monitor.commands import Refusal, Wrong

if TYPE_CHECKING:
    from monitor.bench import Probe
    from monitor.commands.attached import Attached

SHOW_S = 0.25
SILENT_S = 3.0
TYPED = 16  # columns left for what is typed
ESCAPES = str.maketrans(dict.fromkeys([*range(32), *range(127, 160)], "?"))


class Guide:
    """One run, from the first word to the last standard."""

    def __init__(
        self,
        probe: Probe,
        plan: Sequence[float],
        readings: int,
        resume: Path | None,
        attached: Attached | None = None,
    ) -> None:
        """`resume`: where standards taken so far are kept; None where nothing is.

        `attached`: the service that has the probe's port, so that its log is read instead.
        """
        self._probe = probe
        self._attached = attached
        self._resume = resume
        taken = _left_over(resume) if resume else []
        self._until = 0
        self.run = GuidedRun(probe.medium, probe.tick_us, plan, readings, taken)
        self._clock = HostClock()
        self._decoder = Decoder(probe)
        self._end: asyncio.Event | None = None
        self._left = False
        self._link = "waiting for the port"
        self._last_s = self._clock.now_s()
        self._shown = ""
        self._half = b""
        self._kept = len(taken)
        if taken:
            _say(f"going on with {len(taken)} standards taken before")

    def walk(self, until: int = 0) -> list[dict[str, Any]]:
        """The standards that were taken, once the person says `done`, or once there are `until`.

        Raises Refusal if the run was left before, Wrong if the port cannot be one.
        """
        self._until = until
        asyncio.run(self._walk())
        if self._left:
            kept = f"; {len(self.run.taken)} standards wait in {self._resume}" if self._kept else ""
            raise Refusal(f"left before done, nothing written{kept}")
        return self.run.taken

    async def _walk(self) -> None:
        loop = asyncio.get_running_loop()
        self._end = asyncio.Event()
        source = self._source()
        for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
            loop.add_signal_handler(number, self._leave)
        with contextlib.suppress(PermissionError):  # a file cannot be waited for
            loop.add_reader(sys.stdin.fileno(), self._typed)
        reading = asyncio.create_task(source)
        try:
            while not self._end.is_set():
                self._show()
                with contextlib.suppress(TimeoutError):
                    await asyncio.wait_for(self._end.wait(), SHOW_S)
        finally:
            loop.remove_reader(sys.stdin.fileno())
            reading.cancel()
            await asyncio.gather(reading, return_exceptions=True)
            _say("")

    # what the probe says

    def _source(self) -> Coroutine[Any, Any, None]:
        """What reads until it is cancelled: the service's log, or the port. Raises Wrong."""
        if self._attached is not None:
            return self._attached.follow(self._reading, self._linked, self._down)
        try:
            port = SerialPort(
                self._probe.port or "",
                self._probe.baud,
                self._bytes,
                self._up,
                self._down,
                self._clock,
                self._probe.reset_on_open,
            )
        except PortError as wrong:
            raise Wrong(str(wrong)) from None
        return port.run()

    def _bytes(self, data: bytes, now_s: float) -> None:
        for reading in self._decoder.feed(data, now_s):
            temp = float(reading.temp_c) if reading.temp_c else None
            self._reading(now_s, float(reading.period_us), temp)

    def _reading(self, time_s: float, period_us: float, temp_c: float | None) -> None:
        self._last_s = self._clock.now_s()
        self.run.feed(time_s, period_us, temp_c)
        if len(self.run.taken) != self._kept:
            self._save()
        if self._until and len(self.run.taken) >= self._until and self._end:
            self._end.set()

    def _up(self) -> None:
        self._link = ""
        self._last_s = self._clock.now_s()
        self._decoder.opened(self._last_s)

    def _linked(self) -> None:
        if self._link:
            self._link, self._last_s = "", self._clock.now_s()

    def _down(self, why: str) -> None:
        self._link = why

    # what the person says

    def _typed(self) -> None:
        data = os.read(sys.stdin.fileno(), 4096)
        if not data:
            self._leave()
            return
        *lines, self._half = (self._half + data).split(b"\n")
        for line in lines:
            self._obey(line.decode(errors="replace"))

    def _obey(self, line: str) -> None:
        self._shown = ""
        word = line.strip().lower().removesuffix("%").strip()
        if word == "done":
            if self.run.phase == "question":
                _say("first: keep or drop the one in question")
            elif self._end:
                self._end.set()
        elif word == "keep":
            self.run.keep()
        elif word == "drop":
            self.run.drop()
        elif word:
            self._put_in(word)
        self._save()

    def _put_in(self, word: str) -> None:
        if self.run.phase == "question":
            _say("first: keep or drop the one in question")
            return
        try:
            salinity = float(word)
            if not 0 <= salinity <= 26:
                raise ValueError
        except ValueError:
            shown = word[:40].translate(ESCAPES)
            _say(f"{shown!r} is not understood: a salinity in % by mass, keep, drop or done")
            return
        self.run.put_in(salinity)

    def _leave(self) -> None:
        self._left = True
        if self._end:
            self._end.set()

    # what is shown and kept

    def _show(self) -> None:
        silent = self._clock.now_s() - self._last_s
        if self._link:
            text = self._link
        elif silent > SILENT_S:
            text = f"no reading for {silent:.0f} s: is it the right port and baud rate?"
        else:
            text = self.run.say()
        if not sys.stdout.isatty():
            if _words(text) != self._shown:
                self._shown = _words(text)
                print(text, flush=True)
        elif text != self._shown:  # left alone while nothing changes: somebody may be typing
            self._shown = text
            width = os.get_terminal_size().columns - TYPED
            print(f"\r\x1b[K{text[:width]} > ", end="", flush=True)

    def _save(self) -> None:
        """Keep what was taken, whole or not at all."""
        taken = self.run.taken
        if len(taken) == self._kept:
            return
        if len(taken) > self._kept:
            taken[-1]["taken"] = self._clock.utc().isoformat(timespec="seconds")
        self._kept = len(taken)
        if self._resume is None:
            return
        if not taken:
            self._resume.unlink(missing_ok=True)
            return
        temporary = self._resume.with_name(self._resume.name + ".new")
        try:
            temporary.write_text(json.dumps(taken))
            temporary.replace(self._resume)
        except OSError as wrong:
            _say(f"{self._resume}: cannot be kept ({wrong.strerror}); a run left now is lost")


def _left_over(path: Path) -> list[dict[str, Any]]:
    """Standards of a run that was left. Raises Refusal if they cannot be read."""
    from monitor.bench import Standard

    try:
        found = json.loads(path.read_text())
        for standard in found:
            Standard(**standard)
    except FileNotFoundError:
        return []
    except (OSError, ValueError, TypeError):
        raise Refusal(f"{path}: a run that was left, but it cannot be read; remove it") from None
    return list(found)


def _words(text: str) -> str:
    """The text without its figures, to tell news from progress."""
    return "".join(char for char in text if not (char.isdigit() or char == "."))


def _say(text: str) -> None:
    start = "\r\x1b[K" if sys.stdout.isatty() else ""
    if text or start:
        print(start + text, flush=True)

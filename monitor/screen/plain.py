"""The screen as steady text: for screen readers, pipes and terminals that can only print.

A line a tank to begin with, a line whenever a tank's state becomes another, and once a minute one
line over all. Nothing is ever printed over.
"""

from __future__ import annotations

import asyncio
import math
import re
import signal
from collections.abc import Callable

from monitor.printable import printable
from monitor.screen.figures import Clock, Scale, value_text
from monitor.screen.source import Playable, Source
from monitor.screen.words import CALM, Said, overall, state
from monitor.view import Lane

POLL_S = 0.25
NAME_MOST = 40
_UPTO_FIGURE = re.compile(r"[^0-9]*")


class PlainText:
    """What there is to print, poll by poll."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.clock = Clock(source.started.astimezone())
        self._kinds: dict[tuple[str, str], object] = {}
        self._minute: int | None = None

    def lines(self) -> list[str]:
        """Lines that are due now, without LF."""
        now_s = self.source.now_s
        said = [(lane, state(lane, now_s, self.clock, scale(lane))) for lane in self.source.lanes]
        due = []
        for lane, what in said:
            kind, key = _kind(lane, what), (lane.mark, lane.probe)
            if lane.begun and self._kinds.get(key) != kind:
                self._kinds[key] = kind
                due.append(self._line(now_s, f"{name(lane)}: {_figure(lane)}{what.text}"))
        minute = int(now_s // 60.0) if math.isfinite(now_s) else None
        if minute is not None and minute != self._minute and self._kinds:
            self._minute = minute
            due.append(self._line(now_s, self._over_all(said)))
        return due

    def _over_all(self, said: list[tuple[Lane, Said]]) -> str:
        text = overall(said, [name(lane) for lane, _ in said]).text
        if self.source.trouble:
            return f"{printable(self.source.trouble)}; before that: {text}"
        status = self.source.status
        return f"{text}; {printable(status, 120)}" if status and self.source.live else text

    def _line(self, now_s: float, text: str) -> str:
        return f"{self.clock.second(now_s)}  {text}"


def name(lane: Lane) -> str:
    """The tank's name, safe to print."""
    return printable(lane.label, NAME_MOST)


def scale(lane: Lane) -> Scale:
    """% where there is a calibration, else the period itself."""
    return Scale("%" if lane.calibrated else "us", lane.medium)


def _figure(lane: Lane) -> str:
    """The value with its doubt and unit, where there is one."""
    if not math.isfinite(lane.value):
        return ""
    unit = scale(lane)
    return " ".join(value_text(lane.value, lane.u95, unit).split()) + f" {unit.name}, "


def _kind(lane: Lane, said: Said) -> object:
    """What makes a state another one: not the figures in it."""
    words = _UPTO_FIGURE.match(said.text)
    faults = tuple(fault["fault"] for fault in lane.faults)
    rest = lane.rest["rested_t"] if lane.rest and said.tone == CALM else None
    return said.tone, words and words[0], faults, tuple(lane.lasting), rest


def run(source: Source, write: Callable[[str], object], note: str = "") -> None:
    """Print until a signal comes, or a replay is at its end. Raises BrokenPipeError."""
    asyncio.run(_run(source, write, note))


async def _run(source: Source, write: Callable[[str], object], note: str) -> None:
    stop = asyncio.Event()
    loop = asyncio.get_running_loop()
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        loop.add_signal_handler(number, stop.set)
    text = PlainText(source)
    if note:
        write(printable(note) + "\n")
    write(f"local time, {text.clock.whole(0.0)} at the start of the log\n")
    try:
        while not stop.is_set():
            source.poll()
            write("".join(line + "\n" for line in text.lines()))
            if _over(source):
                return
            behind = not getattr(source, "caught_up", True)
            try:
                await asyncio.wait_for(stop.wait(), 0.001 if behind else POLL_S)
            except TimeoutError:
                pass
    finally:
        source.close()


def _over(source: Source | Playable) -> bool:
    """Whether there is nothing more to come."""
    return not source.live and source.now_s >= getattr(source, "end_s", math.inf)

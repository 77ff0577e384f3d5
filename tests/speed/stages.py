"""What each stage of the chain costs, on the seconds of one log."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable
from pathlib import Path

from monitor.blocks import Block, Event, Second
from monitor.chain import Judges, calibration_of
from monitor.commands import load_bench
from monitor.logbook.parser import Parser
from monitor.logbook.reader import CHUNK
from monitor.signal.seconds import Gatherer
from monitor.tanks import Watched

BATCH = 1000  # seconds converted at a time
ROOMS = ("ledger", "trust", "settling", "trends", "limits", "notices", "tanks")


def costs_us(log: Path, bench: Path, repeats: int = 3) -> dict[str, float]:
    """Processor time of each stage, us a second of the log: median of the repeats.

    A room's cost is what the rooms up to it take less what those before it take.
    """
    times = [_once(log, bench) for _ in range(repeats)]
    return {name: statistics.median(each[name] for each in times) for name in times[0]}


def _once(log: Path, bench: Path) -> dict[str, float]:
    settings = load_bench(bench)
    (probe,) = settings.probe
    items: list[Block | Event] = []
    seconds: list[Second] = []
    calibration = calibration_of(settings, probe)

    def parse() -> None:
        parser = Parser()
        with log.open("rb") as file:
            while data := file.read(CHUNK):
                items.extend(parser.feed(data))

    def gather() -> None:
        gatherer = Gatherer()
        for item in items:
            seconds.extend(gatherer.feed(item))

    def convert() -> None:
        judges = Judges(probe, settings, calibration, {})
        for at in range(0, len(seconds), BATCH):
            judges.convert(seconds[at : at + BATCH])

    spent = {"parser": _cpu_s(parse), "seconds": _cpu_s(gather), "calibration": _cpu_s(convert)}
    before_s = 0.0
    for n, room in enumerate(ROOMS, 1):
        judges = Judges(probe, settings, calibration, {})
        upto_s = _cpu_s(lambda judges=judges, n=n: _judge(judges, seconds, n))  # type: ignore[misc]
        spent[room] = upto_s - before_s
        before_s = upto_s
    return {name: 1e6 * each / len(seconds) for name, each in spent.items()}


def _judge(judges: Judges, seconds: list[Second], rooms: int) -> None:
    """The first so many rooms, as `Judges.step` and the chain call them."""
    trust, settling, watched = judges.trust, judges.settling, Watched()
    for second in seconds:
        changes = judges.ledger.step(second)
        if rooms > 1:
            trust.step(second, changes)
        if rooms > 2:
            settling.step(second, changes, trust)
        if rooms > 3:
            judges.trends.step(second, changes, trust)
        if rooms > 4:
            judges.limits.step(second, settling.u95_pct, trust, settling)
        if rooms > 5:
            judges.notices.step(second, changes, trust, settling, judges.ledger)
        if rooms > 6:
            watched.step(second, trust, settling)


def _cpu_s(work: Callable[[], None]) -> float:
    began_s = time.process_time()
    work()
    return time.process_time() - began_s

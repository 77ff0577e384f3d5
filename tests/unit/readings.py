"""Readings of one invented probe, row by row, through the very gatherer and judge.

The water gives 500 us; noise is white; what is done to the periods is up to the test.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from monitor import bench
from monitor.blocks import Block, Event, Floats
from monitor.dosing.ledger import Dose
from monitor.findings import Finding
from monitor.signal.seconds import Gatherer
from monitor.trust.judge import Trust
from tests.unit.streams import STANDARDS

LEVEL_US = 500.0
PROBE = bench.Probe(tank="t1", standard=STANDARDS, tick_us=0.01)
Change = Callable[[Floats, Floats, np.random.Generator], Floats]  # time, period -> period


def rows(
    lasts_s: float,
    change: Change | None = None,
    *,
    rate_hz: float = 10.0,
    noise: float = 0.002,
    tick_us: float = 0.01,
    seed: int = 1,
) -> Block:
    """Readings at a steady rate; NaN in `change` leaves a row out."""
    rng = np.random.default_rng(seed)
    time_s = np.round(np.arange(int(lasts_s * rate_hz)) / rate_hz, 3)
    period_us = LEVEL_US * np.exp(noise * rng.standard_normal(len(time_s)))
    if change is not None:
        period_us = change(time_s, period_us, rng)
    there = ~np.isnan(period_us)
    period_us = np.round(period_us[there] / tick_us) * tick_us
    return Block(time_s[there], period_us, np.full(int(there.sum()), 25.0))


def judged(
    block: Block,
    events: Sequence[Event] = (),
    *,
    probe: bench.Probe = PROBE,
    carried: Mapping[str, Any] | None = None,
    doses: Sequence[Dose] = (),
    lasts_s: float | None = None,
) -> tuple[list[Finding], Trust]:
    """All findings, and the judge as it stands at the end."""
    trust = Trust("p1", probe, carried)
    gatherer = Gatherer()
    found: list[Finding] = []
    end_s = lasts_s if lasts_s is not None else float(block.time_s[-1]) + 1.0
    marks = [*events, Event(end_s, "end", {})]
    edges = [0, *np.searchsorted(block.time_s, [event.time_s for event in marks]).tolist()]
    for event, start, stop in zip(marks, edges, edges[1:]):
        rows_before = Block(*(column[start:stop] for column in block))
        for second in [*gatherer.feed(rows_before), *gatherer.feed(event)]:
            changes = tuple(dose for dose in doses if dose.met_k == second.k)
            found += trust.step(second, changes)
    return found, trust


def faults(found: Sequence[Finding]) -> list[tuple[str, bool]]:
    """Name of each fault said, in order, and whether that was its end."""
    return [(f["fault"], f["to_t"] is not None) for f in found if f["finding"] == "fault"]


def beliefs(found: Sequence[Finding]) -> list[str]:
    """The words of belief, in order."""
    return [f["belief"] for f in found if f["finding"] == "belief"]


def pulses_up(at_s: Sequence[float], height: float = 0.15, lasts_s: float = 0.5) -> Change:
    """Short jumps up: bubbles."""

    def change(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
        for start in at_s:
            p = np.where((t >= start) & (t < start + lasts_s), p * (1.0 + height), p)
        return p

    return change

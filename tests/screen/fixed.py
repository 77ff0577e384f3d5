"""Lanes in a chosen state, not a judged one: pictures that do not change with the judges."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any

import numpy as np

from monitor.bench import Bench
from monitor.blocks import NAN, Block, Floats, Second
from monitor.findings import Finding
from monitor.screen.source import ActError
from monitor.view import Dosed, Lane, Span
from tests.screen import invented


class FixedLane(Lane):
    """A lane whose present is set by hand."""

    value = 0.08
    u95 = 0.0004
    belief = "believed"
    why = "no fault is seen"
    since_t = 0.0
    moving = False
    rest: Finding | None = None
    outlook: Finding | None = None
    faults: list[Finding] = []  # noqa: RUF012 - set anew, never changed in place
    tank_ml = 1200.0
    tank_u_ml = 6.0
    begun = True
    calibrated = True

    def salinity_of(self, period_us: Floats, temp_c: Floats) -> Floats:
        """The invented probe's own law."""
        return np.asarray(((period_us - 12.0) / 80.0) ** (-1 / 0.95))

    def read(self, salinity: Floats, first_k: int = 0) -> None:
        """Take seconds of these salinities, four readings each; NaN: none."""
        for k, value in enumerate(salinity.tolist(), first_k):
            self.t = k + 1.0
            self.version += 1
            if value != value:
                continue
            second = Second(k)
            wave = value * (1.0 + 0.004 * np.sin(np.array([0.3, 1.9, 4.1, 5.2]) * (k + 1)))
            rows = invented.period_us(wave)
            times = k + np.array([0.0, 0.25, 0.5, 0.75])
            second.block = Block(times, rows, np.full(4, 25.0))
            second.stop = second.n_rows = second.n = 4
            second.mean_us = float(rows.mean())
            second.temp_used_c = 25.0
            second.jitter = 0.003
            self.raw.add(second, 0.0)
            self.trace.add(second, 0.0, value, value, 1.0)


class FixedSource:
    """A source whose time stands still."""

    live = True
    status = ""
    trouble = ""
    caught_up = True

    def __init__(self, lanes: list[Lane], now_s: float) -> None:
        self.lanes = lanes
        self.now_s = now_s
        self.started = datetime(2026, 3, 14, 18, 0, tzinfo=UTC)
        self.orders: list[tuple[str, Mapping[str, Any], str, float]] = []
        self.refusal = ""
        self.closed = False

    def poll(self) -> None:
        """Nothing comes."""

    async def order(
        self, kind: str, fields: Mapping[str, Any], probe: str, ago_s: float = 0.0
    ) -> None:
        """Keep the order, or refuse it."""
        if self.refusal:
            raise ActError(self.refusal)
        self.orders.append((kind, fields, probe, ago_s))

    def close(self) -> None:
        """Note it."""
        self.closed = True


def bench(label: str = "") -> Bench:
    """Three tanks."""
    return invented.bench(3, label)


def mixing(now_s: float = 240.0) -> FixedSource:
    """A dose on its way in t1, bubbles in t2, a still t3 with a gap."""
    settings = bench()
    t = np.arange(int(now_s))
    moving, noisy, still = (
        FixedLane(name, settings.for_probe(name)) for name in ("p1", "p2", "p3")
    )
    left = np.exp(-np.maximum(t - 205.0, 0.0) / 18.0)
    moving.read(np.where(t < 205, 0.08, 0.0931 - 0.0131 * left))
    moving.value, moving.moving = 0.0911, True
    moving.doses.append(Dosed(200.0, 5.0, 52.5, "saline", "d1"))
    moving.outlook = {
        "t": 238.0,
        "salinity_pct": 0.0931,
        "u95_pct": 0.0007,
        "rest_in_s": 42.0,
        "rest_in_u95_s": 9.0,
    }
    moving.outlooks.append(moving.outlook)
    noisy.read(np.full(len(t), 0.085))
    noisy.value, noisy.u95, noisy.belief, noisy.why = 0.085, 0.003, "doubtful", "bubbles"
    evidence = "14 jumps up and 0 down within 60 s, +9 to +21 % of the period; tap the probe"
    noisy.faults = [{"fault": "bubbles", "from_t": 190.0, "evidence": evidence}]
    span = Span("bubbles", 190.0, None, evidence)
    times, periods, _ = noisy.raw.between(170.0, 200.0)
    span.raw = (times, np.where(np.arange(len(times)) % 17 == 5, 1.2 * periods, periods))
    noisy.spans.append(span)
    still.read(np.where((t > 100) & (t < 130), NAN, 0.0905))
    still.value, still.u95 = 0.0905, 0.0004
    still.rest = {"rested_t": 30.0, "salinity_pct": 0.0905, "u95_pct": 0.0004}
    still.rests.append(still.rest)
    return FixedSource([moving, noisy, still], now_s)

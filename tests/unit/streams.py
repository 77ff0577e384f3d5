"""Streams of closed seconds for the slow judges: one probe, one tank, what is done to them chosen.

Invented figures: period = 12 us + 80 us * (salinity in %)^-0.95, f(T) of NaCl.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from types import SimpleNamespace
from typing import Any

import numpy as np

from monitor import bench
from monitor.blocks import NAN, Event, Floats, Second
from monitor.dosing.ledger import Change, Dose
from monitor.findings import Finding
from monitor.trust.slow import Creep
from monitor.trust.trends import Trends

FLOOR_US, GAIN, POWER = 12.0, 80.0, 0.95
STANDARDS = tuple(
    bench.Standard(salinity_pct=s, period_us=FLOOR_US + GAIN * s**-POWER, temp_c=25.0)
    for s in (0.025, 0.05, 0.075, 0.1, 0.125, 0.15)
)


def warmth(temp_c: Floats) -> Floats:
    """Conductivity against 25 C."""
    return 1.0 + 0.02048 * (temp_c - 25.0) + 6.91e-5 * (temp_c - 25.0) ** 2


@dataclass
class Stream:
    """What happens to tank and probe, a figure a second."""

    hours: float
    seed: int = 1
    salinity: Callable[[Floats], Floats] = lambda t: np.full(len(t), 0.08)
    film: Callable[[Floats], Floats] = lambda t: np.zeros(len(t))  # added to ln period
    temp_c: Callable[[Floats], Floats] = lambda t: np.full(len(t), 25.0)
    thermometer: bool = True
    noise: float = 0.002
    doses: list[Dose] = field(default_factory=list)
    out: tuple[int, int] | None = None  # the probe is out of the tank, said so
    temp_u_c: float | None = None

    def __post_init__(self) -> None:
        self.probe = bench.Probe(tank="t1", standard=STANDARDS, temp_u_c=self.temp_u_c)
        n = int(self.hours * 3600)
        t: Floats = np.arange(n, dtype=np.float64) + 0.5
        rng = np.random.default_rng(self.seed)
        temp_c = self.temp_c(t)
        above = GAIN * self.salinity(t) ** -POWER * np.exp(self.film(t)) / warmth(temp_c) ** 0.98
        noise = self.noise * 0.5**0.5 * rng.standard_normal(n)
        self.period_us = (FLOOR_US + above) * np.exp(noise)
        seen_c = temp_c if self.thermometer else np.full(n, 25.0)
        above = (self.period_us - FLOOR_US) * warmth(seen_c) ** 0.98 / GAIN
        self.read_pct = above ** (-1.0 / POWER)
        self.seen_c = temp_c + 0.01 * rng.standard_normal(n) if self.thermometer else t * NAN

    def seconds(self) -> Iterable[tuple[Second, Any, tuple[Change, ...]]]:
        """Each second with the level's judge and the ledger's changes."""
        level = SimpleNamespace(
            locked=False, in_gate_ln=NAN, m=NAN, noise=self.noise, tick_us=0.5, rate_hz=2.0
        )
        rows = zip(self.period_us, np.log(self.period_us), self.read_pct, self.seen_c, strict=True)
        locked_k = 10
        for k, (period_us, ln_us, read_pct, temp_c) in enumerate(rows):
            second = Second(k)
            second.mean_us, second.n = float(period_us), 2
            second.salinity_pct, second.temp_used_c = float(read_pct), float(temp_c)
            changes = tuple(dose for dose in self.doses if dose.met_k == k)
            if changes:
                locked_k = k + 90
            if self.out and k in self.out:
                kind = "out" if k == self.out[0] else "back"
                second.events = (Event(float(k), kind, {"why": "wipe"}),)
                locked_k = self.out[1] + 12
            if self.out and self.out[0] <= k < self.out[1]:
                level.locked, level.in_gate_ln = False, NAN
            else:
                level.locked = k >= locked_k
                level.in_gate_ln = float(ln_us)
                steady = level.locked and level.m == level.m
                level.m = level.m + 0.2 * (ln_us - level.m) if steady else float(ln_us)
            yield second, level, changes

    def judged(
        self, carried: dict[str, Any] | None = None, first_k: int = 0
    ) -> tuple[list[Finding], Creep]:
        """Findings of the slow part and the trends, and the slow part at the end."""
        creep = Creep("p1", self.probe, carried)
        trends = Trends("p1", "t1")
        trust = SimpleNamespace(creep=creep)
        found: list[Finding] = []
        for second, level, changes in self.seconds():
            if second.k < first_k:
                continue
            found += creep.step(second, level, changes)
            found += trends.step(second, changes, trust)
        return found, creep


def dose(t: float, volume_ml: float, liquid_pct: float, tank_ml: float = 1000.0) -> Dose:
    """A dose into a tank that grows, poured in 20 s."""
    return Dose(
        time_s=t,
        open_s=20.0,
        volume_ml=volume_ml,
        volume_u_ml=0.01 * volume_ml,
        liquid="saline" if liquid_pct else "deionised",
        liquid_pct=liquid_pct,
        liquid_u_pct=0.0005,
        tank_ml=tank_ml,
        tank_u_ml=5.0,
        mode="grows",
        key=f"d{t:.0f}",
        met_k=int(t),
        counts=True,
    )

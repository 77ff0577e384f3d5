"""A tank and its probe, a second at a time, for the judge of rest: what happens is chosen.

Invented figures: period = 12 us + 80 us * (salinity in %)^-0.95 at 25 C, one reading a second.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from monitor import bench
from monitor.blocks import NAN, Floats, Second
from monitor.calibration import Calibration, fit
from monitor.dosing.ledger import Dose, Struck, Water
from monitor.findings import Finding
from monitor.settling import Settling

LIQUIDS = {"saline": 0.15, "deionised": 0.0}
BAND_PCT = 0.001
STANDARDS = tuple(
    bench.Standard(salinity_pct=s, period_us=12.0 + 80.0 * s**-0.95, temp_c=25.0, readings=120)
    for s in (0.025, 0.05, 0.075, 0.1, 0.125, 0.15)
)
CALIBRATION: Calibration = fit(STANDARDS, "NaCl", 0.0625)

Happening = Dose | Struck | Water
Happenings = Mapping[int, tuple[Happening, ...]]


@dataclass
class Near:
    """The part of the judge of trust that knows which readings lie near the level."""

    in_gate_ln: float = NAN


@dataclass
class Believed:
    """What the judge of trust says, by hand."""

    belief: str = "believed"
    usable: bool = True
    out: bool = False
    widen: float = 0.0
    faults: dict[str, Finding] = field(default_factory=dict)
    level: Near = field(default_factory=Near)


def dose(time_s: float = 100.0, **changed: Any) -> Dose:
    """52.5 mL of saline in 10 s into 1.2 L; what is given replaces that."""
    plain = Dose(
        time_s=time_s,
        open_s=10.0,
        volume_ml=52.5,
        volume_u_ml=0.6,
        liquid="saline",
        liquid_pct=0.15,
        liquid_u_pct=0.0005,
        tank_ml=1200.0,
        tank_u_ml=6.0,
        mode="grows",
        key=f"{time_s}",
        met_k=math.floor(time_s),
        counts=True,
    )
    return replace(plain, **changed)


def exponential(tau_s: float, given: Dose, before_pct: float = 0.08) -> Callable[[float], float]:
    """Salinity of a well-stirred tank, of which a dose runs in evenly."""
    step = given.landing(before_pct, 0.0)[0] - before_pct
    run = max(given.open_s, 1e-6)

    def at(t: float) -> float:
        x = t - given.time_s
        if x <= 0.0:
            return before_pct
        ran = min(x, run)
        left = tau_s / run * (math.exp(-(x - ran) / tau_s) - math.exp(-x / tau_s))
        return before_pct + step * (ran / run - left)

    return at


def judge(carried: dict[str, Any] | None = None) -> Settling:
    tank = bench.Tank(rest_band_pct=BAND_PCT, volume_ml=1200.0)
    return Settling("p1", "t1", tank, CALIBRATION, 0.1, carried, LIQUIDS)


def seconds(salinity: Callable[[float], float], until: int, noise: float = 1e-4) -> list[Second]:
    """Closed seconds of a tank; NaN salinity is no reading. `noise` is %, of a second's mean."""
    rng = np.random.default_rng(7)
    made = []
    for k in range(until):
        second = Second(k)
        value = salinity(k + 0.5) + noise * float(rng.standard_normal())
        if value == value:
            second.mean_us = 12.0 + 80.0 * value**-0.95
            second.temp_used_c = 25.0
            second.n = second.n_rows = 5
        made.append(second)
    converted(made)
    return made


def converted(made: Sequence[Second]) -> None:
    us: Floats = np.array([s.mean_us for s in made])
    temp_c: Floats = np.array([s.temp_used_c for s in made])
    for second, value in zip(made, CALIBRATION.salinity_pct(us, temp_c).tolist()):
        second.salinity_pct = value


def run(
    settling: Settling,
    made: Sequence[Second],
    happenings: Happenings | None = None,
    trust: Callable[[int], Believed] | None = None,
) -> list[Finding]:
    """All that is said over these seconds. `happenings` by the second in which they are met."""
    said: list[Finding] = []
    plain = Believed()
    for second in made:
        believed = trust(second.k) if trust is not None else plain
        if second.salinity_pct != second.salinity_pct:
            believed = replace(believed, usable=False)
        changes = (happenings or {}).get(second.k, ())
        said += settling.step(second, changes, believed)  # type: ignore[arg-type]
    return said


def rests(said: Sequence[Finding]) -> list[Finding]:
    """Rests as they are declared, without their ends."""
    return [f for f in said if f["finding"] == "rest" and f["to_t"] is None]


def ends(said: Sequence[Finding]) -> list[Finding]:
    return [f for f in said if f["finding"] == "rest" and f["to_t"] is not None]


def outlooks(said: Sequence[Finding]) -> list[Finding]:
    return [f for f in said if f["finding"] == "outlook"]

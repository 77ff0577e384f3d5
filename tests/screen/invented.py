"""Logs of an invented bench for the screen's tests: what is read and done is chosen.

Invented figures: period = 12 us + 80 us * (salinity in %)^-0.95, at 25 C.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

from monitor.bench import Bench, parse
from monitor.blocks import Event, Floats
from monitor.chain import calibration_of
from monitor.logbook.codec import Header, event_line, file_name

STARTED = datetime(2026, 3, 14, 18, 0, tzinfo=UTC)
STANDARDS_PCT = (0.025, 0.05, 0.075, 0.1, 0.125, 0.15)
RATE_HZ = 4.0


def period_us(salinity_pct: Floats) -> Floats:
    """What the probe reads."""
    return np.asarray(12.0 + 80.0 * salinity_pct**-0.95)


def bench(n: int = 1, label: str = "", standards: bool = True, port: str = "") -> Bench:
    """`n` probes p1.. in tanks t1.., every tank the same."""
    return parse(bench_text(n, label, standards, port))


def bench_text(n: int = 1, label: str = "", standards: bool = True, port: str = "") -> str:
    """The same as a bench file's text; `port` with {} for the probe's name."""
    text = "[liquid.saline]\nsalinity_pct = 0.15\n[liquid.deionised]\nsalinity_pct = 0.0\n"
    for i in range(1, n + 1):
        text += f'[probe.p{i}]\ntank = "t{i}"\ntick_us = 0.5\n'
        text += f'port = "{port.format(f"p{i}")}"\n' if port else ""
        for pct in STANDARDS_PCT if standards else ():
            period = float(period_us(np.array(pct)))
            text += f"[[probe.p{i}.standard]]\nsalinity_pct = {pct}\nperiod_us = {period:.4f}\n"
            text += "sd_us = 1.5\nreadings = 120\ntemp_c = 25.0\n"
        text += f"[tank.t{i}]\nvolume_ml = 1200.0\nvolume_u_ml = 6.0\nrest_band_pct = 0.001\n"
        text += "aim_pct = [0.07, 0.10]\n"
        text += f'label = "{label}"\n' if label else ""
    return text


def dosed(at_s: float, to_pct: float, tau_s: float = 8.0) -> Callable[[Floats], Floats]:
    """0.08 % until a dose at `at_s`, then mixing to `to_pct`."""

    def salinity(t: Floats) -> Floats:
        left = np.exp(-np.maximum(t - at_s, 0.0) / tau_s)
        return np.asarray(np.where(t < at_s, 0.08, to_pct + (0.08 - to_pct) * left))

    return salinity


def still(t: Floats) -> Floats:
    """0.08 % all the time."""
    return np.full(len(t), 0.08)


def bubbles(from_s: float, to_s: float, seed: int = 3) -> Callable[[Floats], Floats]:
    """Factors of the period: jumps up by a fifth at random times."""
    rng = np.random.default_rng(seed)

    def factor(t: Floats) -> Floats:
        hit = (t >= from_s) & (t < to_s) & (rng.random(len(t)) < 0.06)
        return np.asarray(np.where(hit, 1.2, 1.0))

    return factor


def log_text(
    settings: Bench,
    probe: str = "p1",
    length_s: float = 300.0,
    salinity: Callable[[Floats], Floats] = still,
    factor: Callable[[Floats], Floats] = np.ones_like,
    events: Iterable[Event] = (),
    silent: tuple[float, float] = (1e9, 1e9),
    started: datetime = STARTED,
    part: int = 1,
    first_s: float = 0.0,
    seed: int = 1,
) -> str:
    """A run's part as the service would have written it; `silent` without rows."""
    rng = np.random.default_rng(seed)
    t = first_s + np.arange(int((length_s - first_s) * RATE_HZ)) / RATE_HZ
    period = period_us(salinity(t)) * factor(t) * np.exp(0.0015 * rng.standard_normal(len(t)))
    period = np.rint(period / 0.5) * 0.5
    head = [Event(first_s, "bench", settings.for_probe(probe).as_event())]
    calibration = calibration_of(settings, probe)
    head += [Event(first_s, "calibration", calibration.as_event())] if calibration else []
    lines = [Header(probe, started, "0123456789abcdef", part).text()]
    lines += [event_line(each.time_s, each.kind, each.fields) for each in head]
    waiting = sorted(events, key=lambda event: event.time_s)
    for time_s, value in zip(t.tolist(), period.tolist()):
        while waiting and waiting[0].time_s <= time_s:
            event = waiting.pop(0)
            lines.append(event_line(event.time_s, event.kind, event.fields))
        if not silent[0] <= time_s < silent[1]:
            lines.append(f"{time_s:.3f},{value:.1f},25.00\n")
    return "".join(lines)


def saved(folder: Path, text: str, probe: str = "p1", part: int = 1) -> str:
    """The text as a log file; gives its path."""
    path = folder / file_name(Header(probe, STARTED, part=part))
    path.write_text(text)
    return str(path)

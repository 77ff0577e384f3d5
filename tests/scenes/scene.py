"""One scene: the water and the probe that are drawn for it, its three files, its truth."""

from __future__ import annotations

import gzip
import json
import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from drivers.virtual_tank import USUAL, Circuit, Climate, Fault, Mixing, Probe, Tank, bench_text
from drivers.virtual_tank.bench_text import LIQUIDS
from drivers.virtual_tank.faults import make
from drivers.virtual_tank.noise import pink

STEP_S = 0.1  # of the truth
STARTED = "2026-03-14T18:00:00Z"


def between(rng: np.random.Generator, low: float, high: float) -> float:
    """Uniform in the logarithm."""
    return float(math.exp(rng.uniform(math.log(low), math.log(high))))


def draw_mixing(rng: np.random.Generator, kind: str) -> Mixing:
    """A way of mixing of this kind, its figures drawn."""
    tau = between(rng, 4.0, 40.0)
    slow = {"plume": (4.0, 10.0), "slow-plume": (4.0, 9.0), "power": (2.0, 4.0)}
    share = {"plume": (0.2, 0.7), "parcel": (0.06, 0.3), "irregular": (0.0, 1.0)}
    late = {"parcel": (2.0, 5.0), "zones": (1.3, 3.0)}
    low, high = {**slow, **late}.get(kind, (3.0, 8.0))
    return Mixing(
        kind=kind,
        tau_s=tau if kind != "dead-zone" else between(rng, 4.0, 25.0),
        delay_s=rng.uniform(0.5, 6.0),
        turbulence=between(rng, 0.04, 0.22),
        share=rng.uniform(*share.get(kind, (0.05, 0.25))),
        slow=rng.uniform(low, high),
        beat=between(rng, 1.0, 6.0),
    )


@dataclass
class Scene:
    """A run that is being drawn: its water, its probe, what is recorded of it."""

    name: str
    family: str
    rng: np.random.Generator
    kind: str = ""
    rate_hz: float | None = None
    swing_c: float = 0.0
    water_pct_per_h: float = 0.0  # of the volume
    volume_ml: float | None = None
    thermometer: bool | None = None
    band_pct: float = 0.001
    events: list[tuple[float, float, str, dict[str, Any]]] = field(default_factory=list)
    doses: list[dict[str, Any]] = field(default_factory=list)
    faults: list[Fault] = field(default_factory=list)
    more: dict[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        rng = self.rng
        self.kind = self.kind or str(rng.choice(USUAL))
        self.recorded_ml = self.volume_ml or float(
            rng.choice([1200.0, 1200.0, 2500.0, round(between(rng, 400.0, 6000.0))])
        )
        self.volume_ml = self.recorded_ml * (1 + 0.005 * rng.standard_normal())
        self.mode = "overflows" if rng.random() < 0.12 else "grows"
        self.tank = Tank(
            rng.uniform(0.035, 0.12),
            self.volume_ml,
            draw_mixing(rng, self.kind),
            rng,
            self.mode,  # type: ignore[arg-type]
            self.water_pct_per_h / 100.0 * self.volume_ml,
        )
        self.circuit = Circuit(
            t0_us=rng.uniform(4.0, 30.0),
            g=between(rng, 380.0, 1250.0),
            p=rng.uniform(0.955, 1.0),
            background_ms_cm=rng.uniform(0.0, 0.003),
        )
        climate = Climate(
            base_c=rng.uniform(22.5, 28.0),
            swing_c=self.swing_c,
            swing_s=between(rng, 600.0, 2400.0),
            ramp_c_per_h=rng.uniform(-0.1, 0.1),
            wander_c=between(rng, 0.01, 0.1),
            wave=pink(rng),
        )
        seen = self.thermometer if self.thermometer is not None else rng.random() > 0.12
        white = between(rng, 0.0004, 0.0056)
        self.probe = Probe(
            self.tank,
            climate,
            rng,
            self.circuit,
            white=white,
            flicker=between(rng, 0.0001, 0.001),
            tick_us=float(rng.choice([0.0625, 0.5, 1.0, 1.0])),
            rate_hz=self.rate_hz or float(rng.choice([2.0, 5.0, 5.0, 10.0, 10.0, 20.0])),
            thermometer_c=0.03 if seen else None,
            faults=self.faults,
        )

    def dose(
        self,
        at_s: float,
        *,
        wrong: bool = False,
        learned_s: float | None = None,
        recorded: bool = True,
        scored: bool = True,
    ) -> float:
        """Pour a dose and record it (or not); gives the time at which it has closed."""
        rng, tank = self.rng, self.tank
        at_s = round(at_s, 3)
        now = tank.settled_pct
        up = bool(rng.random() < (0.75 if now < 0.1 else 0.35))
        liquid, other = ("saline", "deionised") if up else ("deionised", "saline")
        nominal = LIQUIDS[liquid][0]
        step = min(between(rng, 0.0013, 0.022), 0.55 * abs(nominal - now), 0.6 * now)
        volume = round(tank.volume_ml * step / (abs(nominal - now) - step), 1)
        open_s = 0.0 if rng.random() < 0.1 else round(between(rng, 6.0, 75.0), 2)
        poured, truly = volume * (1 + 0.006 * rng.standard_normal()), liquid
        if wrong and rng.random() < 0.6:
            poured *= rng.uniform(0.3, 0.72)
        elif wrong:
            truly = other
        pct = max(0.0, LIQUIDS[truly][0] + LIQUIDS[truly][1] * rng.standard_normal())
        before = tank.settled_pct
        pour = tank.pour(at_s, pct, poured, max(open_s, 1.5))
        if not recorded:
            self.more.setdefault("unrecorded", []).append({"t": at_s, "final_pct": pour.final_pct})
            return at_s + open_s
        fields = {"tank": "t1", "liquid": liquid, "volume_ml": volume}
        fields["volume_u_ml"] = round(0.012 * volume, 2)
        if open_s:
            fields["open_s"] = open_s
        self.events.append((learned_s or at_s, at_s, "dose", fields))
        truth = {"t": at_s, "rest_t": None, "final_pct": pour.final_pct}
        truth |= {"step_pct": pour.final_pct - before, "ledger_wrong": wrong}
        if learned_s is not None:
            truth["learned_t"] = round(learned_s, 3)
        if not scored:
            truth["scored"] = False
        self.doses.append(truth)
        return at_s + open_s

    def rest_s(self, dose: dict[str, Any], until_s: float) -> float | None:
        """When the noise-free salinity is inside the band for good, None if not before then."""
        t = np.arange(dose["t"], until_s, STEP_S)
        outside = np.flatnonzero(np.abs(self._level(t) - dose["final_pct"]) > self.band_pct)
        if outside.size == 0:
            return float(dose["t"])
        if outside[-1] == t.size - 1:
            return None
        return round(float(t[outside[-1] + 1]), 3)

    def _level(self, t: Any) -> Any:
        return self.tank.salinity_pct(t)

    def last_rest_s(self) -> float:
        """When the water has come to rest after the last dose."""
        last = self.doses[-1]
        return self.rest_s(last, last["t"] + 9000.0) or last["t"] + 9000.0

    def fault(self, name: str, from_s: float, to_s: float, **given: Any) -> None:
        """Break the probe from then to then."""
        if name in ("bubbles", "loose-lead"):
            given.setdefault("least_s", 1.05 / self.probe.rate_hz)
        if name == "hum":  # slow enough to be seen between the readings
            high = min(0.9, 0.4 * self.probe.rate_hz)
            given.setdefault("alias_hz", float(self.rng.uniform(0.05, high)))
        self.faults.append(make(name, round(from_s, 1), round(to_s, 1), self.rng, **given))

    def write(self, folder: Path, duration_s: float, **how: bool) -> None:
        """The scene's three files; `how` may say damaged, midnight."""
        duration_s = round(duration_s, 3)
        after = [d["t"] for d in self.doses[1:]] + [duration_s]
        for dose, until in zip(self.doses, after):
            dose["rest_t"] = self.rest_s(dose, until)
            dose["final_pct"] = round(dose["final_pct"], 6)
            dose["step_pct"] = round(dose["step_pct"], 6)
        ends = self._level(np.array([0.0, duration_s]))
        drift = (ends[1] - ends[0]) / (duration_s / 3600) if self.water_pct_per_h else 0.0
        truth = {
            "scene": self.name,
            "family": self.family,
            "duration_s": duration_s,
            "band_pct": self.band_pct,
            "doses": self.doses,
            "faults": [
                {"fault": f.name, "from_t": f.from_s, "to_t": f.to_s, **f.figures}
                for f in self.faults
                if f.name != "lift"
            ],
            "trend_pct_per_h": float(drift),
            "temp_channel": self.probe.thermometer_c is not None,
            "mixing": self.kind,
            **self.more,
        }
        (folder / f"{self.name}.truth.json").write_text(json.dumps(truth, indent=1) + "\n")
        (folder / f"{self.name}.bench.toml").write_text(self._bench())
        lines = self._lines(duration_s)
        if how.get("damaged"):
            lines = damaged(lines, self.rng)
        if how.get("midnight"):
            cut = next(i for i, (t, _) in enumerate(lines) if t >= self.doses[0]["t"] + 13.0)
            _put(folder / f"{self.name}.part1.log", _head(1), lines[:cut])
            _put(folder / f"{self.name}.part2.log", _head(2), lines[cut:])
        elif len(lines) > 5000:
            _put(folder / f"{self.name}.log.gz", _head(), lines)
        else:
            _put(folder / f"{self.name}.log", _head(), lines)

    def _lines(self, duration_s: float) -> list[tuple[float, bytes]]:
        """The log's rows and events after the column line, each with its place in time."""
        rows = self.probe.read(0, int(duration_s * self.probe.rate_hz))
        digits = {0.0625: 4, 0.5: 1}.get(self.probe.tick_us, 0)
        texts = [
            f"{t:.3f},{p:.{digits}f}," + ("" if c != c else f"{c:.2f}")
            for t, p, c in zip(*(column.tolist() for column in rows))
        ]
        lines = [(t, text.encode()) for t, text in zip(rows.time_s.tolist(), texts)]
        self.events.append((duration_s, duration_s, "end", {}))
        for met_s, time_s, kind, fields in self.events:
            text = f"#! {time_s:.3f} {kind} {json.dumps(fields)}".encode()
            place = next((i for i, (t, _) in enumerate(lines) if t > met_s), len(lines))
            lines.insert(place, (met_s, text))
        return lines

    def _bench(self) -> str:
        """The bench file, its standards read with this very probe."""
        return (
            f"# bench of scene {self.name}, drawn\n"
            + bench_text.probe_text("p1", "t1", self.probe, self.rng)
            + bench_text.tank_text("t1", self.recorded_ml, self.mode, self.band_pct)
            + bench_text.liquids_text(LIQUIDS)
        )


def _head(part: int | None = None) -> bytes:
    head = f"# stillbrine log 1\n# probe: p1\n# started: {STARTED}\n"
    if part:
        head += f"# run: {0x51B:016x}\n# part: {part}\n"
    return (head + "time_s,period_us,temp_c\n").encode()


def _put(path: Path, head: bytes, lines: list[tuple[float, bytes]]) -> None:
    data = head + b"".join(text + b"\n" for _, text in lines)
    path.write_bytes(gzip.compress(data, 6, mtime=0) if path.suffix == ".gz" else data)


def damaged(
    lines: list[tuple[float, bytes]], rng: np.random.Generator, share: float = 0.01
) -> list[tuple[float, bytes]]:
    """One row in a hundred spoilt: NULs, noise, two run together, no numbers, gone back.

    Never so that it reads as a good row of a later time: nobody could tell that from the truth.
    """
    spoilt = []
    for place, text in lines:
        if text.startswith(b"#!") or rng.random() >= share:
            spoilt.append((place, text))
            continue
        noise = bytes(int(b) for b in rng.integers(0, 128, rng.integers(5, 40)) if b != 10)
        worse = (
            b"\0" * int(rng.integers(1, 40)) + text,
            noise,
            text[: int(rng.integers(text.index(b",") + 1, len(text)))] + text,
            text.split(b",")[0] + b",nan,1e999,7",
            b"0.001," + text.partition(b",")[2],
        )
        spoilt.append((place, worse[int(rng.integers(0, len(worse)))]))
    return spoilt

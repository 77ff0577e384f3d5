"""The rule that people script, on the same scenes: at rest once the reading stood still.

A smoothed salinity (0.3 of each second's mean) whose highest and lowest value of the last 45 s, or
90 s, are less than the band apart, all of them since the dose. Common practice, no source.
"""

from __future__ import annotations

import gzip
import math
import re
import statistics
from collections.abc import Iterable, Iterator
from typing import TYPE_CHECKING, Any

import numpy as np

from monitor import bench
from monitor.calibration import fit

if TYPE_CHECKING:
    from tests.scenes.said import Scene

WINDOWS_S = (45, 90)
EARLY_S = 2.0
SMOOTH = 0.3
FAR = 0.6  # readings further off the run's median, in the logarithm, are left out
_ROW = re.compile(rb"^(\d+\.\d+),(\d+(?:\.\d+)?),?(-?\d+\.\d+)?$", re.M)


def smoothed(scene: Scene) -> np.ndarray[Any, np.dtype[np.float64]]:
    """The smoothed salinity at the end of each second, NaN before the first reading."""
    settings = bench.parse(scene.bench.read_text())
    probe = next(iter(settings.probe.values()))
    calibration = fit(probe.standards_in_force, probe.medium, probe.tick_us)
    parts = [p.read_bytes() for p in scene.logs]
    plain = [gzip.decompress(x) if p.suffix == ".gz" else x for p, x in zip(scene.logs, parts)]
    rows = _ROW.findall(b"".join(plain))
    t = np.array([float(row[0]) for row in rows])
    period = np.array([float(row[1]) for row in rows])
    temp = np.array([float(row[2]) if row[2] else math.nan for row in rows])
    n = math.ceil(scene.truth["duration_s"])
    second = np.minimum(t.astype(int), n - 1)
    good = (period > 0) & (np.abs(np.log(period / np.median(period[period > 0]))) < FAR)
    count = np.bincount(second[good], minlength=n)
    mean = np.bincount(second[good], period[good], n) / np.maximum(count, 1)
    steady_c = float(np.nanmean(temp)) if np.isfinite(temp).any() else calibration.temp_c
    level = calibration.salinity_pct(np.where(count > 0, mean, np.nan), np.full(n, steady_c))
    out, last = np.empty(n), math.nan
    for i, value in enumerate(level.tolist()):
        if not math.isnan(value):
            last = value if math.isnan(last) else last + SMOOTH * (value - last)
        out[i] = last
    return out


def declared(level: Any, dose: dict[str, Any], window_s: int, band: float) -> int:
    """The second at whose end rest is declared for this dose, -1 if never."""
    first = math.ceil(dose["t"]) + window_s
    for end in range(first, level.size + 1):
        part = level[end - window_s : end]
        if part.max() - part.min() < band:
            return end
    return -1


def summary(scenes: Iterable[Scene]) -> Iterator[str]:
    """A line a window: doses, missed, early, lateness."""
    shown = [
        (scene, smoothed(scene)) for scene in scenes if scene.name.startswith(("dose-", "foreign-"))
    ]
    for window_s in WINDOWS_S:
        late, missed = [], 0
        for scene, level in shown:
            for dose, until in scene.doses:
                if dose["rest_t"] is None:
                    continue
                upto = level[: int(until)]
                at = declared(upto, dose, window_s, scene.truth["band_pct"])
                if at < 0:
                    missed += 1
                else:
                    late.append(at - max(dose["rest_t"], dose.get("learned_t", 0.0)))
        early = sum(x < -EARLY_S for x in late)
        middle = statistics.median(late) if late else math.nan
        high = sorted(late)[int(0.9 * (len(late) - 1))] if late else math.nan
        yield (
            f"spread over {window_s} s: {len(late) + missed} doses, missed {missed}, early {early},"
            f" lateness median {middle:.1f} s p90 {high:.1f} s"
        )

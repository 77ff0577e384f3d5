"""What is said of a scene: its files, the replay of its logs, the records that are well formed."""

from __future__ import annotations

import fnmatch
import gzip
import json
import math
import random
import re
import shlex
import subprocess
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tests.scenes.tally import Tally

Record = dict[str, Any]

NEEDS = {
    "rest": ("t", "rested_t", "salinity_pct", "u95_pct"),
    "outlook": ("t", "salinity_pct", "u95_pct"),
    "fault": ("t", "from_t"),
    "trend": ("t", "from_t", "pct_per_h", "u95_pct_per_h"),
    "limit": ("t", "value", "bound"),
}
ROW = re.compile(rb"\d+(\.\d+)?,\d+(\.\d+)?(,(-?\d+(\.\d+)?)?)?\n")


@dataclass
class Scene:
    """One scene on disk: its truth and its files."""

    name: str
    truth: Record
    logs: list[Path]
    bench: Path

    @property
    def doses(self) -> Iterator[tuple[Record, float]]:
        """Each scored dose, and when the next one (or the end) comes."""
        doses = self.truth["doses"]
        after = [d["t"] for d in doses[1:]] + [self.truth["duration_s"]]
        return ((d, end) for d, end in zip(doses, after) if d.get("scored", True))


def scenes(folder: Path, only: str) -> Iterator[Scene]:
    """The scenes of a folder whose name fits the pattern, in order."""
    for path in sorted(folder.glob("*.truth.json")):
        name = path.name.removesuffix(".truth.json")
        if fnmatch.fnmatch(name, only):
            plain = [folder / f"{name}.log", folder / f"{name}.log.gz"]
            logs = [p for p in plain if p.exists()] or sorted(folder.glob(f"{name}.part*.log*"))
            yield Scene(name, json.loads(path.read_text()), logs, folder / f"{name}.bench.toml")


def replay(command: str, logs: list[Path], bench: Path) -> tuple[list[Record], float]:
    """Findings of these logs and the seconds it took. Raises RuntimeError if it fails."""
    argv: list[str] = []
    for word in shlex.split(command):
        argv += [str(p) for p in logs] if word == "{log}" else [word.format(bench=bench)]
    began = time.perf_counter()
    done = subprocess.run(argv, capture_output=True, text=True, timeout=600, check=False)
    took = time.perf_counter() - began
    if done.returncode != 0:
        last = done.stderr.strip().rpartition("\n")[2]
        raise RuntimeError(f"exit {done.returncode}: {last[:300]}")
    return [json.loads(line) for line in done.stdout.splitlines() if line.strip()], took


def real(x: Any) -> bool:
    return isinstance(x, int | float) and not isinstance(x, bool) and math.isfinite(x)


def flaw(found: Any, last_t: float) -> str | None:
    """What makes a record none that the format allows."""
    if not isinstance(found, dict):
        return "no object"
    for key in NEEDS.get(found.get("finding", ""), ("t",)):
        if not real(found.get(key)):
            return key
    dose_t = found.get("dose_t", "")
    if found.get("finding") == "outlook" and dose_t is not None and not real(dose_t):
        return "dose_t"
    if found["t"] < last_t - 1e-9:
        return "t goes back"
    u95 = found.get("u95_pct")
    if u95 is not None and (not real(u95) or u95 < 0):
        return "u95"
    return None


def well_formed(found: list[Record], tally: Tally, name: str) -> list[Record]:
    """The records that the format allows; the others are counted and named."""
    good: list[Record] = []
    for record in found:
        wrong = flaw(record, good[-1]["t"] if good else -math.inf)
        if wrong:
            tally.malformed.append(f"{name}: {wrong} in {json.dumps(record)[:80]}")
        else:
            good.append(record)
    return good


def cut_differs(command: str, scene: Scene, found: list[Record], rng: random.Random) -> bool:
    """Whether the log cut at a random row says something else up to that row."""
    last = scene.logs[-1]
    data = gzip.decompress(last.read_bytes()) if last.suffix == ".gz" else last.read_bytes()
    lines = data.splitlines(keepends=True)
    rows = [i for i, line in enumerate(lines) if ROW.fullmatch(line)]
    at = rows[rng.randrange(len(rows) // 5, len(rows))]
    until = float(lines[at].split(b",")[0])
    with tempfile.TemporaryDirectory() as folder:
        short = Path(folder) / "cut.log"
        short.write_bytes(b"".join(lines[: at + 1]))
        again, _ = replay(command, [*scene.logs[:-1], short], scene.bench)
    return [f for f in again if f["t"] < until] != [f for f in found if f["t"] < until]

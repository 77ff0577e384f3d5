"""Score `stillbrine replay` against the truth beside each scene.

    python -m tests.scenes.score DIR [--only GLOB] [--cuts] [--spread] [--json FILE]

Reads NAME.log[.gz] (or NAME.part1.log ...), NAME.bench.toml and NAME.truth.json as `draw` writes
them. A rest is late from the moment it began, or from when the dose was recorded if that came
later. Wrong doses are scored apart: what nobody recorded cannot be foreseen. `--spread` also scores
the two rules that people script (spread of a smoothed salinity over 45 s and 90 s below the band)
on the very same doses; `--cuts` replays each log once more, cut at a random row: nothing may be
said from later data.
"""

from __future__ import annotations

import argparse
import fnmatch
import gzip
import json
import math
import random
import re
import shlex
import statistics
import subprocess
import sys
import tempfile
import time
from collections import defaultdict
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

Record = dict[str, Any]

EARLY_S = 2.0  # a rest declared more than this before the truth is early
TOO_SHORT_S = 30.0  # a rest that the next dose ends sooner than this need not have been seen
IN_TIME_S = {
    "no-pulses": 10,
    "short": 10,
    "lodged-bubble": 30,
    "stuck": 60,
    "bubbles": 60,
    "loose-lead": 60,
    "hum": 120,
    "fouling": 5400,
}
NO_REST_ON = ("no-pulses", "short", "stuck", "loose-lead", "lodged-bubble")
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


@dataclass
class Tally:
    """All that is counted over the scenes."""

    doses: int = 0
    missed: int = 0
    early: int = 0
    worst_early: float = 0.0
    late: list[float] = field(default_factory=list)
    rested_err: list[float] = field(default_factory=list)
    plateau_in: int = 0
    u95: list[float] = field(default_factory=list)
    outlook_in: int = 0
    outlook_none: int = 0
    outlook_u95: list[float] = field(default_factory=list)
    n_right: int = 0
    true_verdict: int = 0
    n_wrong: int = 0
    caught_wrong: int = 0
    early_wrong: int = 0
    late_wrong: list[float] = field(default_factory=list)
    faults: dict[str, list[float | None]] = field(default_factory=lambda: defaultdict(list))
    false_faults: list[str] = field(default_factory=list)
    late_faults: list[str] = field(default_factory=list)
    ended: int = 0
    unended: int = 0
    trend_n: int = 0
    trend_hit: int = 0
    trend_scenes: int = 0
    false_trends: list[str] = field(default_factory=list)
    bad_rests: list[str] = field(default_factory=list)
    malformed: list[str] = field(default_factory=list)
    looks_ahead: list[str] = field(default_factory=list)
    broken: list[str] = field(default_factory=list)
    hours: float = 0.0
    seconds: float = 0.0


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
        raise RuntimeError(f"exit {done.returncode}: {done.stderr.strip()[-300:]}")
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


def score_dose(tally: Tally, dose: Record, next_t: float, found: list[Record]) -> str:
    """One dose against the rests said for it; gives what to print."""
    mine = [f for f in found if f["finding"] == "rest" and f.get("to_t") is None]
    mine = [f for f in mine if f.get("dose_t") is not None and abs(f["dose_t"] - dose["t"]) < 0.05]
    wrong = dose["ledger_wrong"]
    if dose["rest_t"] is None:  # overtaken by the next dose: no rest may be declared for it
        tally.doses += bool(mine)
        tally.early += bool(mine)
        return "rest declared for an overtaken dose" if mine else "overtaken"
    known_t = max(dose["rest_t"], dose.get("learned_t", 0.0))
    if not mine and next_t - known_t < TOO_SHORT_S:
        return "overtaken soon after rest"
    tally.doses += 1
    tally.n_wrong += wrong
    if not mine:
        tally.missed += 1
        return "missed"
    rest = mine[0]
    late = rest["t"] - known_t
    (tally.late_wrong if wrong else tally.late).append(late)
    tally.worst_early = max(tally.worst_early, -late)
    if late < -EARLY_S and wrong:
        tally.early_wrong += 1
    elif late < -EARLY_S:
        tally.early += 1
    score_landing(tally, dose, rest)
    if not wrong:
        score_outlook(tally, dose, found)
    return f"late {late:+.1f}s" + (" EARLY" if late < -EARLY_S else "")


def score_landing(tally: Tally, dose: Record, rest: Record) -> None:
    tally.rested_err.append(abs(rest["rested_t"] - dose["rest_t"]))
    tally.plateau_in += abs(rest["salinity_pct"] - dose["final_pct"]) <= rest["u95_pct"]
    tally.u95.append(rest["u95_pct"] / dose["final_pct"])
    if dose["ledger_wrong"]:
        tally.caught_wrong += rest.get("verdict") == "disagrees"
    else:
        tally.n_right += 1
        tally.true_verdict += rest.get("verdict") == "agrees"


def score_outlook(tally: Tally, dose: Record, found: list[Record]) -> None:
    """The last outlook of the first half of a dose's way to rest."""
    half = dose["t"] + 0.5 * (dose["rest_t"] - dose["t"])
    if dose["rest_t"] - dose["t"] <= 15 or dose.get("learned_t", 0.0) >= half - 5:
        return
    said = [f for f in found if f["finding"] == "outlook" and f["dose_t"] is not None]
    said = [f for f in said if abs(f["dose_t"] - dose["t"]) < 0.05 and f["t"] <= half]
    if not said:
        tally.outlook_none += 1
        return
    tally.outlook_in += abs(said[-1]["salinity_pct"] - dose["final_pct"]) <= said[-1]["u95_pct"]
    tally.outlook_u95.append(said[-1]["u95_pct"] / max(abs(dose["step_pct"]), 1e-9))


def score_bad_rests(tally: Tally, scene: Scene, found: list[Record]) -> None:
    """No rest without a dose while one mixes; none on a bad probe."""
    doses = scene.truth["doses"]
    after = [d["t"] for d in doses[1:]] + [scene.truth["duration_s"]]
    for rest in found:
        if rest["finding"] != "rest" or rest.get("to_t") is not None:
            continue
        t = rest["t"]
        ends = [n if d["rest_t"] is None else d["rest_t"] for d, n in zip(doses, after)]
        mixing = any(d.get("learned_t", d["t"]) <= t < end - EARLY_S for d, end in zip(doses, ends))
        if rest.get("dose_t") is None and mixing:
            tally.bad_rests.append(f"{scene.name}: rest without a dose at {t:.0f}s while one mixes")
        if any(
            f["fault"] in NO_REST_ON and f["from_t"] + IN_TIME_S[f["fault"]] <= t <= f["to_t"]
            for f in scene.truth["faults"]
        ):
            tally.bad_rests.append(f"{scene.name}: rest at {t:.0f}s on a bad probe")


def overlaps(found: Record, truth: Record, duration_s: float) -> bool:
    """Whether a fault that was said is this one; where a creep began is hard to say."""
    end = found["to_t"] if found.get("to_t") is not None else duration_s
    began = truth["from_t"] - (1800 if truth["fault"] == "fouling" else 10)
    starts = began <= found["from_t"] <= truth["to_t"] + 30
    return bool(starts and end >= truth["from_t"] - 5 and found["t"] >= truth["from_t"] - 1)


def score_faults(tally: Tally, scene: Scene, found: list[Record]) -> list[str]:
    truth, said = scene.truth, [f for f in found if f["finding"] == "fault"]
    lasts = truth["duration_s"]
    notes, matched = [], []
    for real_one in truth["faults"]:
        name = real_one["fault"]
        hits = [f for f in said if f["fault"] == name and overlaps(f, real_one, lasts)]
        matched += hits
        after = min(f["t"] for f in hits) - real_one["from_t"] if hits else None
        tally.faults[name].append(after)
        if after is None:
            others = ",".join(sorted({f["fault"] for f in said})) or "nothing"
            notes.append(f"{name} NOT FOUND ({others})")
            continue
        notes.append(f"{name} after {after:.0f}s")
        score_fault_times(tally, scene, real_one, hits, after)
    wrong = [f for f in said if not any(f is m for m in matched)]
    wrong = [f for f in wrong if f["fault"] not in truth.get("excused", ())]
    for begin, end, marked in truth.get("out", ()):
        wrong = [f for f in wrong if marked or not (f["from_t"] < end + 60 and f["t"] >= begin)]
    once = {(f["fault"], f["from_t"]): f for f in reversed(wrong)}  # its end is not a second one
    tally.false_faults += [f"{scene.name}: {f['fault']} at {f['t']:.0f}s" for f in once.values()]
    if once:
        notes.append("FALSE " + ",".join(sorted({name for name, _ in once})))
    return notes


def score_fault_times(
    tally: Tally, scene: Scene, fault: Record, hits: list[Record], after: float
) -> None:
    limit = float(IN_TIME_S[fault["fault"]])
    if fault.get("rate_per_h"):
        limit = min(limit, 3600 * 0.02 / fault["rate_per_h"])  # 2 % of the reading has crept by
    if after > limit:
        tally.late_faults.append(
            f"{scene.name}: {fault['fault']} after {after:.0f}s, limit {limit:.0f}s"
        )
    if fault["to_t"] < scene.truth["duration_s"] - 120:
        tally.ended += 1
        ends = [f["to_t"] for f in hits if real(f.get("to_t"))]
        tally.unended += not any(abs(end - fault["to_t"]) <= 60 for end in ends)


def score_trend(tally: Tally, scene: Scene, found: list[Record]) -> list[str]:
    truth = scene.truth["trend_pct_per_h"]
    said = [f for f in found if f["finding"] == "trend"]
    if truth:
        rate = said[-1]["pct_per_h"] if said else math.nan  # the last word counts
        hit = rate * truth > 0 and abs(rate - truth) <= 0.5 * abs(truth)
        tally.trend_n += 1
        tally.trend_hit += hit
        return ["trend " + ("found" if hit else "NOT FOUND")]
    if any(f["fault"] in ("fouling", "lodged-bubble") for f in scene.truth["faults"]):
        return []
    tally.trend_scenes += 1
    if said:
        tally.false_trends.append(scene.name)
    return ["FALSE trend"] if said else []


def score_broken(tally: Tally, scene: Scene, why: Exception) -> None:
    """A scene that breaks the program is a result too."""
    tally.broken.append(f"{scene.name}: {why}")
    for fault in scene.truth["faults"]:
        tally.faults[fault["fault"]].append(None)
    doses = [d for d, _ in scene.doses]
    tally.doses += sum(d["rest_t"] is not None for d in doses)
    tally.missed += sum(d["rest_t"] is not None for d in doses)
    tally.n_wrong += sum(d["ledger_wrong"] for d in doses)
    tally.trend_n += bool(scene.truth["trend_pct_per_h"])


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


def score(tally: Tally, scene: Scene, command: str, cuts: random.Random | None) -> str:
    """Replay one scene and count what it says; gives the line to print."""
    tally.hours += scene.truth["duration_s"] / 3600
    try:
        found, took = replay(command, scene.logs, scene.bench)
        if cuts and cut_differs(command, scene, found, cuts):
            tally.looks_ahead.append(scene.name)
    except (RuntimeError, ValueError, subprocess.TimeoutExpired) as why:
        score_broken(tally, scene, why)
        return f"{scene.name:24s} BROKEN {why}"
    tally.seconds += took
    found = well_formed(found, tally, scene.name)
    notes = [score_dose(tally, dose, next_t, found) for dose, next_t in scene.doses]
    score_bad_rests(tally, scene, found)
    notes += score_faults(tally, scene, found) + score_trend(tally, scene, found)
    return f"{scene.name:24s} {took:5.2f}s  " + "; ".join(notes)


def median(values: list[float]) -> float:
    return statistics.median(values) if values else math.nan


def p90(values: list[float]) -> float:
    return sorted(values)[int(0.9 * (len(values) - 1))] if values else math.nan


def summary(tally: Tally) -> Iterator[str]:
    """The figures, a line each."""
    r, n = tally, len(tally.u95)
    yield (
        f"rest: {r.doses} doses, missed {r.missed}, early {r.early} (worst by {r.worst_early:.1f}"
        f" s), lateness median {median(r.late):.1f} s p90 {p90(r.late):.1f} s,"
        f" rested_t error median {median(r.rested_err):.1f} s"
    )
    yield (
        f"wrong doses apart: early {r.early_wrong}/{r.n_wrong},"
        f" lateness median {median(r.late_wrong):.1f} s p90 {p90(r.late_wrong):.1f} s"
    )
    u95 = 100 * median(r.u95)
    yield f"plateau: {r.plateau_in}/{n} inside u95, u95 median {u95:.2f} % of reading"
    yield (
        f"outlook at half time: {r.outlook_in}/{len(r.outlook_u95)} inside u95, none for"
        f" {r.outlook_none}, u95 median {100 * median(r.outlook_u95):.0f} % of the step"
    )
    yield (
        f"verdict: right doses that agree {r.true_verdict}/{r.n_right},"
        f" wrong doses caught {r.caught_wrong}/{r.n_wrong}"
    )
    for name, after in sorted(r.faults.items()):
        found = [x for x in after if x is not None]
        yield f"fault {name}: found {len(found)}/{len(after)}, after median {median(found):.0f} s"
    yield from listed(f"false faults in {r.hours:.1f} probe-hours", r.false_faults, 20)
    yield f"trends: {r.trend_hit}/{r.trend_n}; {r.seconds:.1f} s in all"
    yield from listed("broken scenes", r.broken)
    yield from listed("faults found too late", r.late_faults)
    yield f"faults whose end was missed by over 60 s: {r.unended}/{r.ended}"
    yield from listed(f"untrue trends, of {r.trend_scenes} scenes without", r.false_trends)
    yield from listed("rests that should not have been said", r.bad_rests)
    yield from listed("malformed records", r.malformed)


def listed(title: str, what: list[str], most: int = 10) -> Iterator[str]:
    yield f"{title}: {len(what)}"
    yield from (f"  {x}" for x in what[:most])


def main(argv: list[str] | None = None) -> int:
    program = Path(sys.executable).with_name("stillbrine")
    ask = argparse.ArgumentParser(description="Score replays against the truth beside each scene.")
    ask.add_argument("scenes", type=Path)
    ask.add_argument("--command", default=f"{program} replay {{log}} --bench {{bench}} --findings")
    ask.add_argument("--only", default="*")
    ask.add_argument("--json", type=Path)
    ask.add_argument("--quiet", action="store_true")
    ask.add_argument("--cuts", action="store_true")
    ask.add_argument("--spread", action="store_true")
    given = ask.parse_args(argv)
    tally, cuts = Tally(), random.Random(1) if given.cuts else None
    chosen = list(scenes(given.scenes, given.only))
    say: Callable[[str], object] = (lambda line: None) if given.quiet else print
    for scene in chosen:
        say(score(tally, scene, given.command, cuts))
    print("---", *summary(tally), sep="\n")
    if given.cuts:
        print(*listed("scenes where a finding used later data", tally.looks_ahead), sep="\n")
    if given.spread:
        from tests.scenes import spread  # NumPy and calibration: only where asked for

        print(*spread.summary(chosen), sep="\n")
    if given.json:
        given.json.write_text(json.dumps(asdict(tally), indent=1))
    return 0


if __name__ == "__main__":
    sys.exit(main())

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
import json
import math
import random
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

from tests.scenes.said import Record, Scene, cut_differs, real, replay, scenes, well_formed
from tests.scenes.tally import Tally, listed, median, p90, summary

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
    return f"{scene.name:24s} {took:5.2f}s  " + "; ".join(score_found(tally, scene, found))


def score_found(tally: Tally, scene: Scene, found: list[Record]) -> list[str]:
    """Hold what was said against the scene's truth."""
    found = well_formed(found, tally, scene.name)
    notes = [score_dose(tally, dose, next_t, found) for dose, next_t in scene.doses]
    score_bad_rests(tally, scene, found)
    return notes + score_faults(tally, scene, found) + score_trend(tally, scene, found)


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
        late = {"late_median": median(tally.late), "late_p90": p90(tally.late)}
        given.json.write_text(json.dumps({**vars(tally), **late}, indent=1) + "\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())

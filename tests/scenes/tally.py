"""What is counted over the scenes, and how it is told."""

from __future__ import annotations

import math
import statistics
from collections import defaultdict
from collections.abc import Iterator
from dataclasses import dataclass, field


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

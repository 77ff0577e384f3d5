"""Whatever happens in a tank: no rest without belief, every number honest, nothing from later."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.blocks import Second
from monitor.dosing.ledger import Struck, Water
from monitor.findings import Finding, line
from tests.unit.settling_tank import Believed, Happening, dose, exponential, judge, run, seconds

UNTIL = 260


class Tale(NamedTuple):
    """Seconds, what happens in them and what is believed."""

    made: list[Second]
    happenings: dict[int, tuple[Happening, ...]]
    beliefs: list[Believed]

    def __repr__(self) -> str:
        kinds = {k: b.belief for k, b in enumerate(self.beliefs) if b != Believed()}
        return f"Tale({len(self.made)} s, {self.happenings}, {str(kinds)[:300]})"


@st.composite
def tales(draw: Any) -> Tale:
    """All at random."""
    rng = np.random.default_rng(draw(st.integers(0, 10**6)))
    tau = float(draw(st.sampled_from([3.0, 12.0, 40.0])))
    doses = [
        dose(float(t) + 0.5, volume_ml=float(rng.uniform(5.0, 200.0)))
        for t in sorted(rng.integers(20, 200, draw(st.integers(0, 3))).tolist())
    ]
    curves = [exponential(tau, poured) for poured in doses]

    def salinity(t: float) -> float:
        if silent[int(t)]:
            return math.nan
        return 0.08 + sum(curve(t) - 0.08 for curve in curves) + float(shifts[int(t)])

    silent = np.zeros(UNTIL + 1, bool)
    for at in rng.integers(0, UNTIL, draw(st.integers(0, 3))).tolist():
        silent[at : at + int(rng.integers(1, 70))] = True
    shifts = np.zeros(UNTIL + 1)
    for at in rng.integers(0, UNTIL, draw(st.integers(0, 2))).tolist():
        shifts[at:] += rng.normal(0.0, 0.004)
    happenings: dict[int, tuple[Happening, ...]] = {}
    for poured in doses:
        met = poured.met_k + int(rng.choice([0, 0, 0, 5, 60]))
        happenings[met] = (*happenings.get(met, ()), replace(poured, met_k=met))
        if rng.random() < 0.2:
            happenings[met + 9] = (Struck(poured, met + 9),)
        if rng.random() < 0.2:
            happenings[met + 12] = (Water(met + 12.0, 1100.0, "w", met + 12),)
    beliefs = [Believed()] * UNTIL
    for kind in draw(st.lists(st.sampled_from(["not-believed", "doubtful", "out"]), max_size=3)):
        at = int(rng.integers(0, UNTIL))
        for k in range(at, min(at + int(rng.integers(1, 60)), UNTIL)):
            beliefs[k] = belief(kind, float(at))
    return Tale(seconds(salinity, UNTIL), happenings, beliefs)


def belief(kind: str, from_t: float) -> Believed:
    if kind == "out":
        return Believed(usable=False, out=True)
    if kind == "doubtful":
        return Believed("doubtful", widen=0.02)
    return Believed("not-believed", usable=False, faults={"stuck": {"from_t": from_t - 4.0}})


@settings(max_examples=40, deadline=None)
@given(tales())
def test_what_is_said_is_honest(tale: Tale) -> None:
    made, happenings, beliefs = tale
    settling = judge()
    said = run(settling, made, happenings, lambda k: beliefs[k])
    open_rest: Finding | None = None
    for finding in said:
        json.loads(line(finding))
        assert 0.0 < finding["t"] <= UNTIL
        assert math.isfinite(finding["salinity_pct"])
        assert finding["u95_pct"] > 0.0
        at = beliefs[int(finding["t"]) - 1]
        if finding["finding"] == "outlook":
            assert at.belief != "not-believed"
            assert not at.out
        elif finding["to_t"] is None:
            assert at.belief != "not-believed"
            assert not at.out
            assert open_rest is None
            assert finding["rested_t"] <= finding["t"]
            assert finding.get("doubtful", False) == (at.belief == "doubtful")
            open_rest = finding
        else:
            assert open_rest is not None
            assert finding["rested_t"] == open_rest["rested_t"]
            assert open_rest["rested_t"] <= finding["to_t"] <= finding["t"]
            open_rest = None
    assert settling.at_rest is open_rest
    json.dumps(settling.carry(), allow_nan=False)


@settings(max_examples=15, deadline=None)
@given(tales(), st.integers(1, UNTIL - 1))
def test_nothing_is_said_from_later_seconds(tale: Tale, cut: int) -> None:
    made, happenings, beliefs = tale
    whole = run(judge(), made, happenings, lambda k: beliefs[k])
    part = run(judge(), made[:cut], happenings, lambda k: beliefs[k])
    assert part == [finding for finding in whole if finding["t"] <= cut]


@settings(max_examples=15, deadline=None)
@given(tales(), st.integers(1, UNTIL - 1))
def test_what_was_carried_can_always_be_resumed(tale: Tale, cut: int) -> None:
    made, happenings, beliefs = tale
    before = judge()
    run(before, made[:cut], happenings, lambda k: beliefs[k])
    after = judge(json.loads(json.dumps(before.carry(), allow_nan=False)))
    later = {k: met for k, met in happenings.items() if k >= cut}
    for finding in run(after, made[cut:], later, lambda k: beliefs[k]):
        assert math.isfinite(finding["salinity_pct"])
        assert finding["u95_pct"] > 0.0

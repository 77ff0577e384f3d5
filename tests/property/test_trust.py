"""What is concluded of a probe does not depend on how its rows were cut: exact equality."""

from __future__ import annotations

import itertools
import json

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.blocks import Block, Event, Second
from monitor.findings import Finding
from monitor.signal.seconds import Gatherer
from monitor.trust.judge import Trust
from tests.unit.readings import PROBE, rows
from tests.unit.test_trust_faults import MADE, between


def troubled(seed: int, name: str) -> Block:
    block = rows(460.0, between(MADE[name][0]), seed=seed)
    rng = np.random.default_rng(seed)
    period = np.where(rng.random(len(block.period_us)) < 0.01, 0.0, block.period_us)
    late = np.sort(block.time_s + rng.uniform(0.0, 0.08, len(period)))
    return Block(np.round(late, 3), period, block.temp_c)


def judged(block: Block, cuts: list[int]) -> tuple[list[Finding], str]:
    trust, gatherer = Trust("p1", PROBE, None), Gatherer()
    found: list[Finding] = []

    def step(seconds: list[Second]) -> None:
        for second in seconds:
            found.extend(trust.step(second, ()))

    edges = sorted({0, len(block.time_s), *cuts})
    for start, stop in itertools.pairwise(edges):
        step(gatherer.feed(Block(*(column[start:stop] for column in block))))
    step(gatherer.feed(Event(float(block.time_s[-1]) + 1.0, "end", {})))
    return found, json.dumps(trust.carry())


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 1000),
    name=st.sampled_from(sorted(MADE)),
    cuts=st.lists(st.integers(1, 4500), max_size=30),
)
def test_any_cut_gives_the_same_findings_and_state(seed: int, name: str, cuts: list[int]) -> None:
    block = troubled(seed, name)
    whole = judged(block, [])
    assert judged(block, [c for c in cuts if c < len(block.time_s)]) == whole
    assert whole[0], "something is said at the start at least"


def test_row_by_row_is_the_same() -> None:
    block = troubled(7, "hum")
    assert judged(block, list(range(1, len(block.time_s)))) == judged(block, [])

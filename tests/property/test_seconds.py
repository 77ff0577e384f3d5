"""Whole seconds do not depend on how rows were cut into blocks: exact equality."""

from __future__ import annotations

import itertools

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.blocks import Block, Event, Second
from monitor.signal.gate import running_median_9
from monitor.signal.seconds import EMPTY_MOST, Gatherer

FIGURES = [
    name for name in Second.__slots__ if name not in ("block", "start", "stop", "salinity_pct")
]


def told(seconds: list[Second]) -> list[str]:
    return [
        repr([getattr(s, name) for name in FIGURES] + [s.time_s.tolist(), s.period_us.tolist()])
        for s in seconds
    ]


def log(seed: int, n: int) -> Block:
    rng = np.random.default_rng(seed)
    steps = rng.choice(
        [0.0, 0.013, 0.1, 0.4, 3.0, 8000.0], n, p=[0.2, 0.3, 0.3, 0.18, 0.018, 0.002]
    )
    period = np.round(500 + rng.normal(0, 1, n), 1)
    period[rng.random(n) < 0.05] = 0.0
    period[rng.random(n) < 0.05] *= 1.3
    temp = np.where(rng.random(n) < 0.3, np.nan, 24 + rng.normal(0, 0.01, n))
    return Block(np.round(np.cumsum(steps), 3), period, temp)


def gathered(block: Block, cuts: list[int], events: dict[int, Event]) -> list[str]:
    gatherer = Gatherer()
    seconds: list[Second] = []
    edges = sorted({0, len(block.time_s), *cuts, *events})
    for start, stop in itertools.pairwise(edges):
        if start in events:
            seconds += gatherer.feed(events[start])
        seconds += gatherer.feed(Block(*(column[start:stop] for column in block)))
    seconds += gatherer.feed(Event(float(block.time_s[-1]) + 2.0, "end", {}))
    return told(seconds)


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    n=st.integers(1, 700),
    cuts=st.lists(st.integers(1, 699), max_size=40),
    marks=st.lists(st.integers(0, 699), max_size=3),
)
def test_any_cut_gives_the_same_seconds(
    seed: int, n: int, cuts: list[int], marks: list[int]
) -> None:
    block = log(seed, n)
    events = {m: Event(float(block.time_s[m]), "note", {}) for m in marks if m < n}
    whole = gathered(block, [], events)
    assert gathered(block, [c for c in cuts if c < n], events) == whole
    assert gathered(block, list(range(1, n)), events) == whole


@given(st.lists(st.floats(-1e6, 1e6), min_size=9, max_size=60))
def test_the_running_median_is_the_median(values: list[float]) -> None:
    array = np.array(values)
    windows = np.lib.stride_tricks.sliding_window_view(array, 9)
    assert running_median_9(array).tolist() == np.median(windows, axis=1).tolist()


def test_every_empty_second_is_given_until_nothing_can_fall_due() -> None:
    gatherer = Gatherer()
    one = Block(np.array([0.5]), np.array([500.0]), np.array([24.0]))
    gatherer.feed(one)
    seconds = gatherer.feed(Event(1e8 + 0.5, "alive", {}))
    assert [s.k for s in seconds] == list(range(EMPTY_MOST + 1))
    assert seconds[1].temp_used_c == 24.0
    assert np.isnan(seconds[-1].temp_used_c)
    assert [s.k for s in gatherer.feed(Event(1e8 + 9.0, "alive", {}))] == [100_000_000]


def test_a_row_of_a_closed_second_is_dropped_and_counted() -> None:
    gatherer = Gatherer()
    gatherer.feed(Event(7.2, "alive", {}))
    rows = Block(np.array([6.9, 7.1, 8.0]), np.full(3, 500.0), np.full(3, np.nan))
    (second,) = gatherer.feed(rows)
    assert (second.k, second.n_rows, gatherer.dropped) == (7, 1, 1)


def test_a_spike_is_gated_and_a_step_passes() -> None:
    period = np.full(300, 500.0)
    period[100] = 600.0
    period[200:] = 560.0
    rows = Block(np.arange(300) / 10, period, np.full(300, np.nan))
    gatherer = Gatherer()
    seconds = gatherer.feed(rows)
    assert (seconds[10].n, seconds[10].mean_us, seconds[10].high_us) == (9, 500.0, 600.0)
    assert (seconds[20].n, seconds[21].mean_us) == (6, 560.0)

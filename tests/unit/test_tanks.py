"""What takes all the probes: unwatched tanks, probes that differ, probes that were swapped."""

from __future__ import annotations

import math
from types import SimpleNamespace
from typing import Any

import pytest

from monitor.blocks import Event, Second
from monitor.findings import Finding
from monitor.tanks import Differ, Seen, Swaps, Together, Unwatched, Watched


def watched(usable: list[tuple[int, int]], until: int, why: str = "no-pulses") -> Watched:
    """A probe usable in these seconds [from, to)."""
    made = Watched()
    for k in range(until):
        trust: Any = SimpleNamespace(
            usable=any(a <= k < b for a, b in usable), out=False, why=why, belief="not-believed"
        )
        settling: Any = SimpleNamespace(moving=False, shown_pct=0.08, u95_pct=0.0002)
        made.step(Second(k), trust, settling)
    return made


def test_a_tank_is_unwatched_after_ten_minutes_and_watched_again_at_once() -> None:
    one = watched([(0, 100), (900, 1000)], 1000)
    fold = Unwatched("t1")
    found = fold.advance(1000.0, [("p1", one, 0.0)])
    assert [(f["t"], f["from_t"], f["to_t"]) for f in found] == [
        (700.0, 100.0, None),
        (901.0, 100.0, 901.0),
    ]
    assert "p1 (no-pulses)" in found[0]["why"]


def test_a_link_that_is_lost_is_why_nobody_watched() -> None:
    for why, said in (("asleep", "the machine slept"), ("unplugged", "unplugged")):
        one = watched([(0, 100)], 100)
        for k in range(100, 800):
            second = Second(k)
            if k == 100:
                second.events = (Event(99.9, "gap", {"link": "lost", "why": why}),)
            trust: Any = SimpleNamespace(usable=False, out=False, why="fine", belief="believed")
            one.step(second, trust, SimpleNamespace(moving=False))  # type: ignore[arg-type]
        (found,) = Unwatched("t1").advance(800.0, [("p1", one, 0.0)])
        assert found["why"] == f"no usable reading for 10 min: p1 ({said})"


@pytest.mark.parametrize("steps", [[1000], [50, 699, 700, 701, 1000], list(range(1, 1001))])
def test_when_it_is_asked_makes_no_difference(steps: list[int]) -> None:
    fold = Unwatched("t1")
    found: list[Finding] = []
    for upto in steps:
        one = watched([(0, 100), (900, 1000)], upto)
        found += fold.advance(float(upto), [("p1", one, 0.0)])
    assert [f["t"] for f in found] == [700.0, 901.0]


def test_a_second_probe_keeps_the_tank_watched() -> None:
    one, other = watched([(0, 100)], 1500), watched([(0, 1500)], 1500)
    assert Unwatched("t1").advance(1500.0, [("p1", one, 0.0), ("p2", other, 0.0)]) == []


def minutes(values: list[float], u95: float = 0.0002) -> dict[float, tuple[float, float]]:
    return {60.0 * (i + 1): (value, u95) for i, value in enumerate(values)}


def test_probes_that_part_are_said_to_differ_and_the_changed_one_is_named() -> None:
    steady, creeping = [0.08] * 60, [0.08] * 20 + [0.078] * 20 + [0.08] * 20
    fold = Differ("t1", ("p1", "p2"))
    found = fold.advance(math.inf, [minutes(steady), minutes(creeping)])
    assert [f["to_t"] is None for f in found] == [True, False]
    assert found[0]["t"] == 60.0 * 30
    assert "p2 is the one that changed" in found[0]["text"]
    assert found[0]["value"] == pytest.approx(0.002)


def test_probes_within_their_doubt_are_left_alone() -> None:
    fold = Differ("t1", ("p1", "p2"))
    assert fold.advance(math.inf, [minutes([0.08] * 60), minutes([0.0803] * 60)]) == []


def other_probe(probe: str, t: float, before_us: float, after_us: float) -> Finding:
    return {
        "finding": "notice",
        "what": "other-probe",
        "probe": probe,
        "tank": f"of {probe}",
        "t": t,
        "from_t": 0.0,
        "to_t": None,
        "before_us": before_us,
        "after_us": after_us,
    }


def test_two_probes_that_read_each_others_past_were_swapped() -> None:
    fold = Swaps()
    assert fold.take(other_probe("p1", 100.0, 400.0, 700.0)) == []
    (said,) = fold.take(other_probe("p2", 102.0, 702.0, 399.0))
    assert said["what"] == "probes-swapped"
    closed = fold.take({**other_probe("p1", 200.0, 400.0, 700.0), "to_t": 200.0})
    assert [f["to_t"] for f in closed] == [200.0]


def test_two_other_probes_are_no_swap() -> None:
    fold = Swaps()
    fold.take(other_probe("p1", 100.0, 400.0, 700.0))
    assert fold.take(other_probe("p2", 102.0, 600.0, 399.0)) == []


def test_findings_of_several_probes_come_in_order_of_time() -> None:
    together = Together()
    together.take([{"finding": "belief", "probe": "p2", "t": 9.0}])
    together.take([{"finding": "belief", "probe": "p1", "t": 3.0}])
    seen = [
        Seen("p1", "t1", 5.0, [(watched([(0, 5)], 5), 0.0)]),
        Seen("p2", "t2", 9.0, [(watched([(0, 9)], 9), 0.0)]),
    ]
    ready, _ = together.advance(seen)
    assert [f["t"] for f in ready] == [3.0]
    ready, _ = together.advance([seen[0]._replace(done=True), seen[1]])
    assert [f["t"] for f in ready] == [9.0]

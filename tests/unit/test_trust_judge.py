"""Out and back, gaps, what is carried over a restart, and the word of belief."""

from __future__ import annotations

import json

import numpy as np

from monitor.blocks import Event, Floats
from monitor.findings import Finding
from monitor.signal.seconds import Gatherer
from monitor.trust.judge import Trust
from tests.unit.readings import LEVEL_US, PROBE, beliefs, faults, judged, pulses_up, rows
from tests.unit.test_trust_faults import MADE, between


def said(found: list[Finding]) -> list[Finding]:
    return [f for f in found if f["finding"] == "fault"]


def wiped(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
    """Air, then rinse water, then the tank with a cleaner probe."""
    p = np.where((t >= 200) & (t < 230), 0.0, p)
    p = np.where((t >= 230) & (t < 260), 20.0 * p, p)
    return np.where(t >= 260, 0.97 * p, p)


def test_between_out_and_back_nothing_is_judged() -> None:
    marks = [Event(199.0, "out", {"why": "wipe"}), Event(262.0, "back", {})]
    found, trust = judged(rows(600.0, wiped), marks)
    assert faults(found) == []
    assert beliefs(found) == ["believed"]
    assert trust.usable
    assert not trust.out
    assert abs(trust.level_ln - np.log(0.97 * LEVEL_US)) < 0.002


def test_out_is_neither_usable_nor_locked() -> None:
    _, trust = judged(rows(240.0, wiped), [Event(199.0, "out", {"why": "wipe"})])
    assert trust.out
    assert not trust.usable
    assert not trust.locked


def test_a_fault_is_over_when_the_probe_is_taken_out() -> None:
    block = rows(260.0, between(MADE["lodged-bubble"][0]))
    found, _ = judged(block, [Event(250.0, "out", {"why": "wipe"})])
    assert faults(found) == [("lodged-bubble", False), ("lodged-bubble", True)]
    assert said(found)[1]["to_t"] == 250.0


def test_an_unmarked_lift_is_at_most_no_pulses() -> None:
    found, trust = judged(rows(600.0, wiped))
    assert set(faults(found)) <= {("no-pulses", False), ("no-pulses", True)}
    assert trust.belief == "believed"


def test_silence_in_a_gap_is_the_links() -> None:
    block = rows(600.0, between(lambda t, p, _: np.full(len(p), np.nan)))
    lost, back = Event(200.5, "gap", {"link": "lost"}), Event(399.0, "gap", {"link": "back"})
    assert faults(judged(block, [lost, back])[0]) == []
    found, _ = judged(block, [lost, Event(390.0, "gap", {"link": "back"})])
    assert said(found)[0]["t"] == 395.0  # four seconds from the end of the second of `back`
    assert faults(found) == [("no-pulses", False), ("no-pulses", True)]


def test_silence_from_the_start_is_said() -> None:
    block = rows(60.0, lambda t, p, _: np.where(t < 30, np.nan, p))
    found, _ = judged(block)
    assert said(found)[0]["t"] == 4.0
    assert beliefs(found)[0] == "believed"


def test_a_fault_in_force_is_said_again_and_ends_in_the_next_run() -> None:
    for name, (change, _) in MADE.items():
        before = rows(300.0, between(change))
        found, trust = judged(before, lasts_s=300.0)
        begun = said(found)[-1]
        carried = json.loads(json.dumps(trust.carry()))
        calm = rows(400.0, seed=2)
        if name == "lodged-bubble":
            calm = rows(400.0, lambda t, p, _: p * np.where(t < 50, 1.2, 1.0), seed=2)
        again, after = judged(calm, carried=carried)
        assert said(again)[0] == {**begun, "t": 1.0}
        ends = [f for f in said(again) if f["to_t"] is not None]
        assert [(f["fault"], f["from_t"]) for f in ends] == [(name, begun["from_t"])]
        assert not after.faults


def test_the_baseline_is_carried() -> None:
    _, trust = judged(rows(300.0, noise=0.004))
    _, after = judged(rows(2.0), carried=json.loads(json.dumps(trust.carry())))
    assert abs(after.level.noise / 0.004 - 1) < 0.2
    assert abs(after.level.rate_hz - 10.0) < 0.5


def test_not_believed_until_twelve_seconds_after() -> None:
    found, _ = judged(rows(600.0, between(MADE["stuck"][0])))
    words = [f for f in found if f["finding"] == "belief"]
    ended = said(found)[1]
    assert words[2]["belief"] == "believed"
    assert words[2]["t"] == ended["t"] + 12.0
    assert "stuck" in words[1]["why"]


def test_bubbles_widen_the_doubt_of_the_level() -> None:
    _, trust = judged(rows(300.0, pulses_up(np.arange(200.0, 299.0, 3.7).tolist())))
    assert trust.belief == "doubtful"
    assert trust.widen > 0
    assert trust.usable


def test_another_question_makes_it_doubtful_and_its_answer_believed() -> None:
    trust = Trust("p1", PROBE, None)
    found: list[Finding] = []
    for second in Gatherer().feed(rows(200.0)):
        trust.doubts = "another probe?" if 100 <= second.k < 150 else ""
        found += trust.step(second, ())
    assert beliefs(found) == ["believed", "doubtful", "believed"]
    assert [f["t"] for f in found] == [1.0, 101.0, 151.0]


def test_a_probe_that_reads_every_third_second_is_heard() -> None:
    slow = rows(1200.0, rate_hz=1 / 3)
    found, trust = judged(slow)
    assert faults(found) == []
    assert abs(trust.level.rate_hz - 1 / 3) < 0.1
    assert trust.locked
    stops = rows(900.0, lambda t, p, _: np.where(t < 600, p, np.nan), rate_hz=1 / 3)
    begun = said(judged(stops, lasts_s=900.0)[0])[0]
    assert begun["fault"] == "no-pulses"
    assert 597.0 + 25.0 < begun["t"] < 597.0 + 40.0  # ten intervals

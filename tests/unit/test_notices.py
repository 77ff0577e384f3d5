"""Each notice: when it begins and ends, when it is not said, how it is answered and carried."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from types import SimpleNamespace
from typing import Any

import pytest

from monitor.bench import parse
from monitor.blocks import Event, Second
from monitor.dosing.ledger import Ledger
from monitor.findings import Finding
from monitor.notices import Notices
from monitor.runs import shifted_times

BENCH = parse(
    '[probe.p1]\ntank = "t1"\n'
    "[tank.t1]\nvolume_ml = 1000.0\nvolume_u_ml = 5.0\nrest_band_pct = 0.001\n"
    "[liquid.saline]\nsalinity_pct = 0.15\n[liquid.deionised]\nsalinity_pct = 0.0\n"
)
LEVEL_LN = math.log(600.0)


class Play:
    """The notices of one probe, and what the other judges say to them."""

    def __init__(self, carried: dict[str, Any] | None = None, from_k: int = 0) -> None:
        self.notices = Notices("p1", BENCH, "t1", carried)
        self.ledger = Ledger(BENCH, "t1", None)
        self.trust = SimpleNamespace(
            usable=True,
            out=False,
            belief="believed",
            why="",
            locked=True,
            level_ln=LEVEL_LN,
            faults={},
            doubts="",
        )
        self.settling = SimpleNamespace(
            shown_pct=0.1, u95_pct=1e-4, moving=False, heading=0.0, at_rest=None, answered=[]
        )
        self.k = from_k
        self.said: list[Finding] = []

    def on(
        self, seconds: int, *events: Event, shown: Callable[[int], float] | None = None, **row: Any
    ) -> list[Finding]:
        """So many seconds; the events stand in the first, `row` is what the seconds read."""
        found: list[Finding] = []
        for i in range(seconds):
            second = Second(self.k)
            second.n_rows, second.median_us = 10, math.exp(LEVEL_LN)
            for name, value in row.items():
                setattr(second, name, value)
            second.events = events if i == 0 else ()
            if shown is not None:
                self.settling.shown_pct = shown(self.k)
            changes = self.ledger.step(second)
            trust: Any = self.trust
            settling: Any = self.settling
            found += self.notices.step(second, changes, trust, settling, self.ledger)
            self.k += 1
        self.said += found
        return found

    def event(self, kind: str, **fields: Any) -> Event:
        return Event(float(self.k), kind, fields)

    def dose(self, id_: str, volume_ml: float = 20.0, **more: Any) -> Event:
        fields = {"tank": "t1", "liquid": "saline", "volume_ml": volume_ml, "id": id_, **more}
        return Event(float(self.k), "dose", fields)

    def answer(self, said: Finding) -> Event:
        return self.event("answer", of=said["what"], from_t=said["from_t"], answer="seen to")

    def rest(self, dose_t: float | None = None, before: float = 0.1, from_t: float = 0.0) -> None:
        """The other judges say that it is at rest, where it is."""
        self.settling.at_rest = {
            "finding": "rest",
            "dose_t": dose_t,
            "salinity_pct": self.settling.shown_pct,
        }
        change = SimpleNamespace(
            dose=None if dose_t is None else "one",
            from_t=from_t,
            still=SimpleNamespace(level_pct=before),
        )
        self.settling.answered = [(SimpleNamespace(change=change), float(self.k))]


def check_pair(said: Finding, over: Finding) -> None:
    """The second record has all fields of the first, and its end."""
    assert said["to_t"] is None
    assert over["t"] == over["to_t"] > said["t"]
    assert {**over, "t": 0, "to_t": 0} == {**said, "t": 0, "to_t": 0}


# entered-twice


def twice() -> tuple[Play, Finding]:
    play = Play()
    play.on(100)
    assert play.on(20, play.dose("a"), shown=lambda k: 0.1) == []
    (said,) = play.on(5, play.dose("b"))
    return play, said


def test_the_same_dose_again_is_asked_about_and_a_strike_answers() -> None:
    play, said = twice()
    assert (said["what"], said["value"], said["from_t"]) == ("entered-twice", 20.0, 120.0)
    assert "within 20 s" in said["text"]
    (over,) = play.on(5, play.event("strike", of="b", tank="t1"))
    check_pair(said, over)


def test_an_answer_ends_it_too_and_another_questions_answer_does_not() -> None:
    play, said = twice()
    assert play.on(2, play.event("answer", of="entered-twice", from_t=7.0, answer="no")) == []
    (over,) = play.on(2, play.answer(said))
    check_pair(said, over)


@pytest.mark.parametrize(
    ("wait_s", "other"),
    [(121, {}), (20, {"volume_ml": 20.6}), (20, {"liquid": "deionised"})],
)
def test_a_dose_that_is_another_is_not_asked_about(wait_s: int, other: dict[str, Any]) -> None:
    play = Play()
    play.on(50)
    play.on(wait_s, play.dose("a"))
    play.settling.moving = True
    again = play.dose("b")
    again.fields.update(other)  # type: ignore[attr-defined]
    assert [f for f in play.on(5, again) if f["what"] == "entered-twice"] == []


# no-step: 20 mL of 0.15 % into 1000 mL of 0.1 % make +0.00098 %; 200 mL +0.0083 %


def test_a_record_without_a_step_is_said_a_minute_after_its_end() -> None:
    play = Play()
    play.on(100)
    found = play.on(200, play.dose("a", 200.0, open_s=30.0), shown=lambda k: 0.1)
    (said,) = found
    assert (said["what"], said["from_t"]) == ("no-step", 100.0)
    assert said["t"] == pytest.approx(100 + 30 + 60, abs=1)
    assert said["value"] == pytest.approx(0.0, abs=1e-9)
    assert "+0.0083 %" in said["text"]
    assert "valve shut" in said["text"]
    (over,) = play.on(5, shown=lambda k: 0.108)
    check_pair(said, over)


def test_a_step_that_came_is_not_asked_about() -> None:
    play = Play()
    play.on(100)
    assert play.on(300, play.dose("a", 200.0), shown=lambda k: 0.1083 if k > 130 else 0.1) == []


def test_a_step_too_small_to_tell_is_not_asked_about() -> None:
    play = Play()
    play.on(100)
    assert play.on(300, play.dose("a", 20.0), shown=lambda k: 0.1) == []


def test_a_probe_that_is_not_usable_asks_nothing() -> None:
    play = Play()
    play.on(100)
    play.trust.usable = False
    assert play.on(300, play.dose("a", 200.0), shown=lambda k: 0.1) == []


# not-at-rest


@pytest.mark.parametrize(("open_s", "due_s"), [(10.0, 1810.0), (120.0, 2520.0)])
def test_a_dose_that_does_not_rest_is_said_once_with_why(open_s: float, due_s: float) -> None:
    play = Play()
    play.on(100)
    play.settling.moving = True
    began = play.k
    dose = play.dose("a", 200.0, open_s=open_s)
    said = play.on(3000, dose, shown=lambda k: 0.1083 + (k - began) * 1e-6)
    (late,) = said
    assert (late["what"], late["from_t"]) == ("not-at-rest", 100.0)
    assert late["t"] - 100.0 == pytest.approx(due_s, abs=1)
    assert "still moving +0.0001 %/min" in late["text"]
    play.rest(100.0)
    (over,) = play.on(1)
    check_pair(late, over)


@pytest.mark.parametrize(
    ("state", "why"),
    [
        ({"out": True}, "out of the tank"),
        ({"belief": "not-believed", "why": "short"}, "not believed: short"),
    ],
)
def test_why_a_dose_did_not_rest(state: dict[str, Any], why: str) -> None:
    play = Play()
    play.on(100)
    vars(play.trust).update(state)
    play.settling.moving = True
    found = play.on(2000, play.dose("a", 200.0), shown=lambda k: 0.1083)
    assert [why in f["text"] for f in found if f["what"] == "not-at-rest"] == [True]


def test_a_dose_that_rested_is_not_said_to_be_late() -> None:
    play = Play()
    play.on(100)
    play.on(60, play.dose("a", 200.0), shown=lambda k: 0.1083)
    play.rest(100.0)
    assert play.on(3000) == []


# unrecorded-dose: 0.1 to 0.105 % in 1000 mL is 111 mL of 0.15 %


def unrecorded(**state: Any) -> tuple[Play, list[Finding]]:
    play = Play()
    play.on(400)
    vars(play.trust).update(state)
    play.settling.moving = True
    play.on(40, shown=lambda k: 0.105)
    play.rest(None, 0.1, 400.0)
    play.settling.moving = False
    return play, play.on(1)


def test_a_step_that_nobody_recorded_is_offered_with_its_size() -> None:
    play, (said,) = unrecorded()
    assert (said["what"], said["from_t"]) == ("unrecorded-dose", 400.0)
    assert said["value"] == pytest.approx(1000 * 0.005 / (0.15 - 0.105), rel=1e-6)
    assert "of saline" in said["text"]
    assert play.on(100) == []
    (over,) = play.on(2, Event(405.0, "dose", play.dose("late", 110.0).fields))
    check_pair(said, over)


def test_a_step_is_answered() -> None:
    play, (said,) = unrecorded()
    (over,) = play.on(2, play.answer(said))
    check_pair(said, over)


@pytest.mark.parametrize("belief", ["doubtful", "not-believed"])
def test_a_step_of_a_probe_in_doubt_is_not_offered(belief: str) -> None:
    assert unrecorded(belief=belief)[1] == []


@pytest.mark.parametrize("kind", ["back", "gap", "water"])
def test_a_step_that_a_person_explained_is_not_offered(kind: str) -> None:
    play = Play()
    play.on(390)
    told: dict[str, dict[str, Any]] = {
        "gap": {"link": "back"},
        "water": {"tank": "t1", "in_ml": 50.0},
    }
    fields = told.get(kind, {})
    play.on(10, Event(390.0, kind, fields))
    play.on(40, shown=lambda k: 0.105)
    play.rest(None, 0.1, 400.0)
    assert play.on(1) == []


# lift


def lifted(play: Play, away_us: float = 5000.0, gone_s: int = 60, **end: Any) -> list[Finding]:
    """Silence, other water, and back."""
    play.on(100)
    play.trust.locked = False
    play.trust.faults = {"no-pulses": {"finding": "fault", "from_t": 101.0, "fault": "no-pulses"}}
    found = play.on(gone_s // 2, n_rows=0, median_us=math.nan)
    play.trust.faults = {}
    found += play.on(gone_s // 2, median_us=away_us)
    play.trust.locked = True
    vars(play.trust).update(end)
    return found + play.on(3)


def test_a_lift_that_was_not_marked_is_said_once_it_is_over_and_its_fault_withdrawn() -> None:
    fault, lift = lifted(Play())
    assert (fault["fault"], fault["withdrawn"]) == ("no-pulses", "the probe was lifted")
    assert lift["what"] == "lift"
    assert lift["to_t"] == lift["t"] == 161.0
    assert lift["value"] == pytest.approx(60, abs=1)


def test_silence_alone_takes_no_fault_back() -> None:
    (lift,) = lifted(Play(), away_us=600.0)
    assert lift["what"] == "lift"


@pytest.mark.parametrize("gone_s", [8, 2000])
def test_a_moment_or_an_hour_is_no_lift(gone_s: int) -> None:
    assert lifted(Play(), gone_s=gone_s) == []


def test_another_value_afterwards_is_no_lift() -> None:
    assert lifted(Play(), level_ln=LEVEL_LN + 0.03) == []


def test_a_lift_that_was_marked_is_not_said() -> None:
    play = Play()
    play.on(10, play.event("out", why="wipe"))
    play.trust.out = True
    assert lifted(play) == []


# other-probe


def other(away: float, asleep_s: int = 40) -> tuple[Play, list[Finding]]:
    """The link lost, and a probe back at another level."""
    play = Play()
    play.on(100)
    play.on(1, play.event("gap", link="lost", why="unplugged"))
    play.trust.locked = False
    play.k += asleep_s
    play.on(8, play.event("gap", link="back"))
    play.trust.locked, play.trust.level_ln = True, LEVEL_LN + away
    return play, play.on(60)


def test_another_probe_is_asked_about_after_a_good_minute_and_doubted_at_once() -> None:
    play, (said,) = other(0.05)
    assert said["what"] == "other-probe"
    assert said["value"] == pytest.approx(100 * math.expm1(0.05))
    assert said["before_us"] == pytest.approx(600.0)
    assert said["after_us"] == pytest.approx(600.0 * math.exp(0.05))
    assert play.trust.doubts == "another probe?"
    (over,) = play.on(1, play.answer(said))
    check_pair(said, over)
    assert play.trust.doubts == ""
    assert play.on(100) == []


@pytest.mark.parametrize("kind", ["check", "compare"])
def test_a_check_standard_answers_it(kind: str) -> None:
    play, (said,) = other(-0.05)
    (over,) = play.on(1, play.event(kind, salinity_pct=0.1))
    check_pair(said, over)


def test_what_may_be_drift_is_not_asked_about() -> None:
    assert other(0.015)[1] == []
    assert other(0.05, asleep_s=4 * 3600)[1] == []
    assert len(other(0.07, asleep_s=4 * 3600)[1]) == 1


def test_a_dose_meanwhile_explains_another_level() -> None:
    play = Play()
    play.on(100)
    play.on(1, play.event("gap", link="lost"))
    play.on(8, play.event("gap", link="back"))
    play.on(5, play.dose("a", 200.0))
    play.trust.level_ln = LEVEL_LN - 0.08
    assert [f for f in play.on(50, shown=lambda k: 0.1083) if f["what"] == "other-probe"] == []


# carried


@pytest.mark.parametrize(
    "make", [lambda: other(0.05), unrecorded, lambda: (twice()[0], [twice()[1]])]
)
def test_an_open_question_lives_on_in_the_next_run_and_is_answered_there(
    make: Callable[[], tuple[Play, list[Finding]]],
) -> None:
    play, (said,) = make()
    by_s = -float(play.k) - 30.0
    carried = json.loads(json.dumps(shifted_times(play.notices.carry(), by_s)))
    after = Play(carried)
    after.trust.level_ln = play.trust.level_ln
    assert after.on(100) == [], "it was said already"
    (over,) = after.on(1, after.event("answer", of=said["what"], answer="seen to"))
    assert over["from_t"] == pytest.approx(said["from_t"] + by_s)
    assert (over["what"], over["text"], over["to_t"]) == (said["what"], said["text"], 101.0)


def test_another_probe_is_seen_over_a_restart() -> None:
    play = Play()
    play.on(100)
    after = Play(json.loads(json.dumps(shifted_times(play.notices.carry(), -130.0))))
    after.trust.level_ln = LEVEL_LN + 0.05
    (said,) = after.on(60)
    assert said["what"] == "other-probe"
    assert said["from_t"] == pytest.approx(-30.0)

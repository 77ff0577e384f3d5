"""Acts: their effect is shown before they are done, and only a form without a fault is an order."""

from __future__ import annotations

from datetime import timedelta, timezone
from pathlib import Path

import pytest

from monitor.blocks import Event
from monitor.screen import acts, questions
from monitor.screen.figures import Clock
from monitor.screen.forms import Form
from monitor.screen.replayed import ReplaySource
from monitor.view import Lane
from tests.screen import invented

DOSE = Event(120.0, "dose", {"tank": "t1", "liquid": "saline", "volume_ml": 120.0, "id": "d1"})
CLOCK = Clock(invented.STARTED.astimezone(timezone(timedelta(hours=1))))


@pytest.fixture
def lane(tmp_path: Path) -> Lane:
    text = invented.log_text(invented.bench(), events=[DOSE])
    source = ReplaySource([invented.saved(tmp_path, text)])
    source.seek(110.0)
    source.advance()
    return source.lanes[0]


def typed(form: Form, **values: str) -> Form:
    for each in form.fields:
        if each.name in values:
            each.value = ""
            form.at = form.fields.index(each)
            for char in values[each.name]:
                form.type(char)
            each.value = each.value or values[each.name]
    return form


def test_a_dose_shows_where_it_lands(lane: Lane) -> None:
    form = acts.dose(lane)
    assert form is not None
    told = typed(form, volume_ml="120", open_s="10,5").preview(lane)
    # mass balance: S = (S0 V + Sd v) / (V + v)
    assert told.plan is not None
    assert told.plan.salinity_pct == pytest.approx((lane.value * 1200 + 0.15 * 120) / 1320)
    assert "then 1320 mL" in told.lines[0]
    assert told.order == (
        "dose",
        {"tank": "t1", "liquid": "saline", "volume_ml": 120.0, "open_s": 10.5},
    )
    assert "Read a second instrument before a large dose." in told.cautions


def test_a_dose_for_a_salinity_to_reach(lane: Lane) -> None:
    form = acts.dose(lane)
    assert form is not None
    told = typed(form, to="0.09").preview(lane)
    assert told.plan is not None
    assert told.plan.salinity_pct == pytest.approx(0.09)
    told = typed(form, to="0.2").preview(lane)
    assert told.wrong.startswith("0.2 % cannot be reached from 0.0799")
    assert told.order is None


def test_what_speaks_against_it_is_said(lane: Lane) -> None:
    form = acts.dose(lane)
    assert form is not None
    told = typed(form, volume_ml="900").preview(lane)
    assert any("outside the tank's aim_pct of 0.07 to 0.1 %" in each for each in told.cautions)
    assert any("fast change of salinity can kill" in each for each in told.cautions)


def test_a_dose_that_cannot_be_foretold_can_be_recorded_all_the_same(tmp_path: Path) -> None:
    text = invented.log_text(invented.bench(standards=False))
    source = ReplaySource([invented.saved(tmp_path, text)])
    source.seek(110.0)
    source.advance()
    form = acts.dose(source.lanes[0])
    assert form is not None
    told = typed(form, volume_ml="50").preview(source.lanes[0])
    assert told.plan is None
    assert told.cautions == ["tank t1: no salinity now; expected one to plan from"]
    assert told.order is not None


@pytest.mark.parametrize("wrong", ["1e3", "nan", "-4", "１２", "12.5.1", "\x1b[31m", "1_000"])
def test_what_is_no_number_is_no_order(lane: Lane, wrong: str) -> None:
    form = acts.dose(lane)
    assert form is not None
    told = typed(form, volume_ml=wrong).preview(lane)
    assert told.order is None
    assert "is no number; expected" in told.wrong
    assert told.wrong.isprintable()


def test_an_empty_dose_is_no_order(lane: Lane) -> None:
    form = acts.dose(lane)
    assert form is not None
    assert form.preview(lane).order is None
    assert typed(form, volume_ml="0").preview(lane).order is None


def test_strike_names_the_dose(tmp_path: Path) -> None:
    text = invented.log_text(invented.bench(), events=[DOSE])
    source = ReplaySource([invented.saved(tmp_path, text)])
    assert acts.strike(source.lanes[0], CLOCK) is None
    source.seek(200.0)
    source.advance()
    form = acts.strike(source.lanes[0], CLOCK)
    assert form is not None
    assert form["dose"] == "19:02:00 120 mL saline"
    told = typed(form, why="twice").preview(source.lanes[0])
    assert told.order == ("strike", {"of": "d1", "why": "twice", "tank": "t1"})


def test_out_and_back(tmp_path: Path) -> None:
    text = invented.log_text(invented.bench(), events=[Event(100.0, "out", {"why": "wipe"})])
    source = ReplaySource([invented.saved(tmp_path, text)])
    form = acts.lift(source.lanes[0])
    form.turn(1)
    assert form.preview(source.lanes[0]).order == ("out", {"why": "standard"})
    source.seek(200.0)
    source.advance()
    assert acts.lift(source.lanes[0]).preview(source.lanes[0]).order == ("back", {})


def test_water_says_what_is_then_in_the_tank(lane: Lane) -> None:
    told = typed(acts.water(lane), out_ml="200", in_ml="150").preview(lane)
    assert told.lines == ["the tank then holds 1150 mL"]
    assert told.order == (
        "water",
        {"tank": "t1", "out_ml": 200.0, "in_ml": 150.0, "liquid": "saline"},
    )
    told = typed(acts.water(lane), out_ml="1200").preview(lane)
    assert told.order is None
    assert told.wrong.startswith("that leaves 0 mL")


def test_note_and_silence(lane: Lane) -> None:
    assert acts.note(lane).preview(lane).order is None
    told = typed(acts.note(lane), text="pump off").preview(lane)
    assert told.order == ("note", {"text": "pump off"})
    form = acts.silence(lane, lambda seconds: f"in {seconds:g} s")
    assert form.preview(lane).order == ("silence", {"what": "t1", "until_utc": "in 1800 s"})
    assert typed(form, minutes="9999").preview(lane).order is None


def test_another_instrument_is_compared(lane: Lane) -> None:
    told = typed(questions.measured(lane), salinity="0.081", u="0.0005").preview(lane)
    assert told.lines[0].startswith("the probe reads 0.001")
    assert told.lines[0].endswith("less")
    assert told.order == ("compare", {"salinity_pct": 0.081, "u_pct": 0.0005})
    assert questions.measured(lane).preview(lane).order is None
    assert typed(questions.measured(lane), salinity="99").preview(lane).order is None


def test_what_is_asked_is_answered_by_its_own_time(lane: Lane) -> None:
    assert questions.answer(lane) is None
    notice = {"finding": "notice", "probe": "p1", "tank": "t1", "t": 90.0, "from_t": 80.0}
    lane.finding({**notice, "to_t": None, "what": "unrecorded-dose", "text": "who\x1b[2J dosed?"})
    form = questions.answer(lane)
    assert form is not None
    assert form.preview(lane).order is None
    assert form.preview(lane).lines == ["who\\x1b[2J dosed?"]
    told = typed(form, answer="me").preview(lane)
    assert told.order == ("answer", {"of": "unrecorded-dose", "from_t": 80.0, "answer": "me"})


def test_a_calibration_is_chosen_among_the_named_sets(lane: Lane) -> None:
    assert questions.calibration(lane) is None
    bench = lane.settings
    assert bench is not None
    probe = bench.probe["p1"]
    named = tuple(
        each.model_copy(update={"set": "may" if i < 3 else "june"})
        for i, each in enumerate(probe.standard)
    )
    probe = probe.model_copy(update={"standard": named})
    other = Lane("p1", bench.model_copy(update={"probe": {"p1": probe}}))
    form = questions.calibration(other)
    assert form is not None
    assert form.preview(other).order == ("calibration", {"set": "june"})
    form.turn(1)
    assert form.preview(other).order == ("calibration", {"set": "may"})

"""A scripted working day of twelve hours on two tanks, held against what really happened.

Wipes, a calibration, water changes, doses recorded well, twice or not at all, plugs exchanged, a
machine asleep over midnight, a bench file edited: no false alarm, nothing true unsaid, and a
replay that says the same.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from monitor.findings import Finding, line
from monitor.replay import open_logs, replay
from tests.service.running import events
from tests.soak.day import Day

pytestmark = pytest.mark.slow

ASLEEP = (34_560.0, 36_960.0)


@pytest.fixture(scope="module")
def day(tmp_path_factory: pytest.TempPathFactory) -> Day:
    made = Day(tmp_path_factory.mktemp("day"))
    made.run()
    return made


def said(day: Day, kind: str, **fields: Any) -> list[Finding]:
    """Findings of this kind and with these fields, in order."""
    return [
        f
        for f in day.bench.said
        if f["finding"] == kind and all(f.get(key) == value for key, value in fields.items())
    ]


def happened(day: Day, what: str) -> list[dict[str, Any]]:
    return [each for each in day.truth if each["what"] == what]


def logs(day: Day, probe: str = "*") -> list[Path]:
    return sorted(day.bench.folder.glob(f"{probe}-*.log"))


def replayed(paths: list[Path]) -> list[str]:
    return [line(f) for batch in replay(open_logs([str(p) for p in paths], None)) for f in batch]


def test_the_day_was_as_scripted(day: Day) -> None:
    assert len(happened(day, "wipe")) == 3
    assert len(happened(day, "dose")) == 4
    assert len(happened(day, "water")) == 2
    assert len(happened(day, "plugs exchanged")) == 2
    assert len(happened(day, "bench edited")) == len(happened(day, "bench edited wrongly")) == 1
    assert len(logs(day)) == 4
    assert len(events(logs(day, "p1")[0], "calibration")) == 2
    assert len(events(logs(day, "p1")[0], "bench")) == 2


def test_no_fault_is_left_standing(day: Day) -> None:
    """Only the lift that nobody marked looked like one, and that was taken back."""
    last_word = {(f["probe"], f["fault"], f["from_t"]): f for f in said(day, "fault")}
    assert len(last_word) <= 1
    assert all(f.get("withdrawn") == "the probe was lifted" for f in last_word.values())


def test_no_limit_and_no_trend_is_invented(day: Day) -> None:
    assert said(day, "limit") == []
    assert said(day, "trend") == []


def test_a_tank_is_unwatched_only_while_the_machine_slept(day: Day) -> None:
    spans = said(day, "unwatched")
    assert {f["tank"] for f in spans} == {"t1", "t2"}
    assert len(spans) == 4  # each begun and ended
    for f in spans:
        assert f["from_t"] == pytest.approx(ASLEEP[0], abs=2)
        assert f["to_t"] is None or f["to_t"] == pytest.approx(ASLEEP[1], abs=2)
        assert "the machine slept" in f["why"]


def test_each_recorded_dose_is_judged_right(day: Day) -> None:
    verdicts = {f["dose_t"]: f["verdict"] for f in said(day, "rest", to_t=None) if f["dose_t"]}
    first, _, twice, last = happened(day, "dose")
    assert verdicts[first["t"]] == "agrees"
    assert verdicts[last["t"]] == "agrees"
    again_t = events(logs(day, "p1")[0], "dose")[2]["TIME"]
    assert 0 < again_t - twice["t"] < 30
    assert verdicts.get(again_t) != "agrees", "the second record was of no dose"


def test_the_dose_that_nobody_recorded_is_noticed_with_its_size(day: Day) -> None:
    (dose,) = [each for each in happened(day, "dose") if not each["recorded"]]
    (notice,) = said(day, "notice", what="unrecorded-dose")
    assert notice["tank"] == dose["tank"]
    assert notice["value"] == pytest.approx(dose["ml"], rel=0.2)
    assert notice["from_t"] == pytest.approx(dose["t"], abs=30)
    assert "saline" in notice["text"]


def test_a_dose_entered_twice_is_asked_about_until_one_is_struck(day: Day) -> None:
    asked, over = said(day, "notice", what="entered-twice")
    (dose,) = [each for each in happened(day, "dose") if each["recorded"] == 2]
    assert asked["t"] - dose["t"] < 30
    assert asked["value"] == dose["ml"]
    assert over["to_t"] == pytest.approx(events(logs(day, "p1")[0], "strike")[0]["TIME"], abs=1)


def test_only_the_lift_that_was_not_marked_is_noticed(day: Day) -> None:
    (wipe,) = [each for each in happened(day, "wipe") if not each["marked"]]
    (lift,) = said(day, "notice", what="lift")
    assert lift["probe"] == wipe["probe"]
    assert lift["from_t"] == pytest.approx(wipe["t"], abs=15)
    assert lift["to_t"] - wipe["t"] < 180


def test_exchanged_plugs_are_noticed_both_times_and_nothing_else_is_asked(day: Day) -> None:
    exchanged = [each["t"] for each in happened(day, "plugs exchanged")]
    for what in ("probes-swapped", "other-probe"):
        begun = said(day, "notice", what=what, to_t=None)
        count = 1 if what == "probes-swapped" else 2
        assert len(begun) == 2 * count
        for t in exchanged:
            assert sum(t < f["t"] < t + 180 for f in begun) == count
        assert len(said(day, "notice", what=what)) == 2 * len(begun), "each was answered"
    known = {"unrecorded-dose", "entered-twice", "lift", "other-probe", "probes-swapped"}
    assert {f["what"] for f in said(day, "notice")} == known


def test_belief_is_lost_only_where_there_was_cause(day: Day) -> None:
    (lifted,) = [each["t"] for each in happened(day, "wipe") if not each["marked"]]
    causes = [lifted, *(each["t"] for each in happened(day, "plugs exchanged"))]
    for f in said(day, "belief"):
        if f["belief"] != "believed":
            assert any(t <= f["t"] < t + 180 for t in causes), f


def test_another_probe_is_doubted_as_soon_as_it_is_asked_about(day: Day) -> None:
    doubted = [(f["probe"], f["t"]) for f in said(day, "belief", belief="doubtful")]
    for f in said(day, "notice", what="other-probe", to_t=None):
        assert any(p == f["probe"] and 0 <= t - f["t"] <= 2 for p, t in doubted)


def test_a_replay_of_the_four_logs_says_the_same_record_for_record(day: Day) -> None:
    assert replayed(logs(day)) == [line(f) for f in day.bench.said]


@pytest.mark.parametrize("probe", ["p1", "p2"])
def test_a_replay_of_one_probe_says_its_own(day: Day, probe: str) -> None:
    whose = {"p1": "t1", "p2": "t2"}[probe]
    own = [
        line(f)
        for f in day.bench.said
        if probe == f.get("probe") or (f["finding"] == "unwatched" and f["tank"] == whose)
    ]
    alone = [each for each in own if '"probes-swapped"' not in each]
    assert replayed(logs(day, probe)) == alone

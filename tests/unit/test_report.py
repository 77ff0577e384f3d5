"""The morning page and the hand-over: what stands in them, in which order, and how it reads."""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from monitor.report.digest import handover, sections
from monitor.report.night import Night, gather
from monitor.report.pages import BARS, page, table, text
from monitor.report.words import length, pct, size

LOGS = Path(__file__).parents[2] / "replay_logs"
DAY = [str(path) for path in sorted(LOGS.glob("working-day-01.*.log.gz"))]
BEGAN = datetime(2026, 3, 14, 14, 0, tzinfo=UTC)


@pytest.fixture(scope="module")
def night() -> Night:
    return gather(DAY)


@pytest.fixture(scope="module")
def morning() -> Night:
    """The same, from eight hours on."""
    return gather(DAY, since=BEGAN + timedelta(hours=8))


def lines(told: Night, title: str) -> list[str]:
    return next((s.lines for s in sections(told) if s.title == title), [])


def test_what_needs_a_person_comes_first(night: Night) -> None:
    first = sections(night)[0]
    assert (first.title, first.urgent) == ("Needs you now", True)
    (said,) = first.lines
    assert "148 mL of saline" in said
    assert "record it with its time" in said


def test_each_dose_has_its_verdict(night: Night) -> None:
    first, merged, struck, last = lines(night, "Doses")
    assert "as predicted" in first
    assert "as predicted" in last
    assert "no rest of its own: the next change was recorded 20 s later" in merged
    assert "struck out, entered twice" in struck


def test_what_people_did_stands_in_words(night: Night) -> None:
    said = "\n".join(lines(night, "Checks, notes, orders"))
    for words in (
        "probe out of the tank (wipe), by ab",
        "probe back in the tank, by ab",
        "bench file changed: probe.p1.standard",
        "another calibration in force: again-",
        "water that is no dose: the tank now holds 1390 mL, by ab",
        "dose d4 struck out (entered twice), by ab",
        "answered 'other-probe': plugs exchanged, by ab",
    ):
        assert words in said
    assert said.count("bench file changed") == 1, "the head of a further part is no change"


def test_what_both_probes_share_is_said_once(night: Night) -> None:
    (asleep,) = [said for said in lines(night, "Gaps and losses") if "slept" in said]
    assert asleep.startswith("p1, p2: no readings (the machine slept) from ")
    assert "(40 min)" in asleep


def test_exchanged_plugs_are_one_question_each_time(night: Night) -> None:
    said = lines(night, "Questions")
    assert sum("plugs exchanged?" in each for each in said) == 2
    assert not any("another probe?" in each for each in said)


def test_rinse_water_of_a_lift_is_not_shown_as_the_tanks(night: Night) -> None:
    (p1,) = [lane for lane in night.lanes if lane.probe == "p1"]
    assert min(m.low_pct for m in p1.minutes if m.low_pct == m.low_pct) > 0.07
    assert [m.belief for m in p1.minutes if 25_200 < m.t <= 25_260] == ["out"]


def test_an_open_question_from_before_is_still_open_in_the_morning(morning: Night) -> None:
    assert morning.from_t == 8 * 3600
    assert any("148 mL of saline" in said for said in lines(morning, "Needs you now"))
    assert any("148 mL of saline" in said for said in handover(morning)[0].lines)
    assert not any("stands twice" in said for said in lines(morning, "Questions"))


@pytest.mark.parametrize("columns", [60, 80, 100])
def test_no_line_is_wider_than_the_terminal_and_no_figure_loses_its_unit(
    night: Night, columns: int
) -> None:
    for line in text(night, columns).splitlines()[1:]:
        assert len(line) <= columns
        assert not re.match(r"\s*%", line)
        assert not re.search(r"\+-\s*$", line)


def test_a_short_stretch_has_no_holes_in_its_bars() -> None:
    short = gather(DAY, since=BEGAN, until=BEGAN + timedelta(minutes=17))
    bars = [line.strip() for line in text(short, 80).splitlines() if set(line) & set(BARS)]
    assert len(bars) == 2
    assert all(" " not in each and 15 < len(each) < 20 for each in bars)


def test_the_page_and_the_table_tell_the_same(night: Night) -> None:
    assert "148 mL of saline" in page(night)
    rows = table(night).splitlines()
    assert len(rows) == 1 + sum(len(lane.minutes) for lane in night.lanes)
    assert rows[0].count(",") == rows[1].count(",")


def test_lengths_and_figures_for_a_person() -> None:
    assert [length(s) for s in (25, 2400, 43200)] == ["25 s", "40 min", "12.0 h"]
    assert pct(0.08703, 0.00075) == "0.08703 +- 0.00075 %"
    assert pct(float("nan")) == "no salinity"
    assert [size(u) for u in (7.6e-5, 0.00123, 0.5)] == ["0.000076", "0.0012", "0.50"]

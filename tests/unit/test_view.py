"""The view: what a screen is told of one probe, folded from a log."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.blocks import Event, Second
from monitor.follow import Follower
from monitor.view import Lane, Raw, Trace
from monitor.view.traces import DOUBTFUL, MINUTES_MOST, NOT_TANK, RAW_MOST, SECONDS_MOST, TANK
from tests.screen import invented

DOSE = {"tank": "t1", "liquid": "saline", "volume_ml": 120.0, "open_s": 10.0, "id": "d1"}


def folded(text: str, offset_s: float = 0.0) -> Lane:
    """A lane after this log."""
    lane = Lane("p1")
    lane.begin_run(offset_s)
    follower = Follower("p1", watch=lane.second)
    for finding in follower.feed(text.encode()):
        lane.finding(finding)
    return lane


@pytest.fixture(scope="module")
def dosed() -> Lane:
    to_pct = (0.08 * 1200 + 0.15 * 120) / 1320
    return folded(
        invented.log_text(
            invented.bench(label="north"),
            salinity=invented.dosed(125.0, to_pct),
            events=[Event(120.0, "dose", DOSE)],
        )
    )


def test_a_dose_is_marked_and_its_rest_is_in_force(dosed: Lane) -> None:
    assert [(d.time_s, d.volume_ml, d.liquid) for d in dosed.doses] == [(120.0, 120.0, "saline")]
    assert dosed.rest is not None
    assert dosed.rest["dose_t"] == 120.0
    assert dosed.rest["verdict"] == "agrees"
    assert not dosed.moving
    assert len(dosed.outlooks) > 2
    assert dosed.tank_ml == 1320.0


def test_settings_and_figures_are_those_in_force(dosed: Lane) -> None:
    assert (dosed.tank, dosed.label, dosed.aim, dosed.band) == ("t1", "north", (0.07, 0.1), 0.001)
    assert dosed.value == pytest.approx(0.0864, abs=0.001)
    assert 0 < dosed.u95 < 0.001
    assert dosed.belief == "believed"


def test_the_trace_has_a_row_a_second(dosed: Lane) -> None:
    t, value, filtered, good, period, _, _ = dosed.trace.seconds.between(0.0, 1e9)
    assert len(t) == 299  # the last second is not closed
    assert np.all(np.diff(t) == 1.0)
    assert np.all(good[30:] == TANK)
    assert abs(np.median(value[:100]) - 0.08) < 2e-4
    assert np.all(period > 0)
    assert math.isfinite(filtered[-1])


def test_raw_rows_become_salinities(dosed: Lane) -> None:
    t, period, temp = dosed.raw.between(50.0, 60.0)
    assert len(t) == 40
    values = dosed.salinity_of(period, temp)
    assert np.median(values) == pytest.approx(0.08, rel=0.01)


def test_a_struck_dose_is_shown_struck() -> None:
    events = [Event(60.0, "dose", DOSE), Event(70.0, "strike", {"of": "d1", "id": "s1"})]
    lane = folded(invented.log_text(invented.bench(), length_s=90.0, events=events))
    assert [dose.struck for dose in lane.doses] == [True]
    assert lane.last_dose is None
    assert lane.tank_ml == 1200.0


def test_gaps_and_lifts_are_spans_and_no_reading_stands_in_them() -> None:
    events = [
        Event(100.0, "gap", {"link": "lost", "why": "unplugged"}),
        Event(130.0, "gap", {"link": "back"}),
        Event(200.0, "out", {"why": "wipe"}),
    ]
    text = invented.log_text(invented.bench(), events=events, silent=(100.0, 130.0))
    lane = folded(text)
    link, out = lane.spans
    assert (link.what, link.from_t, link.to_t, link.why) == ("link", 100.0, 130.0, "unplugged")
    assert (out.what, out.from_t, out.to_t) == ("out", 200.0, None)
    assert lane.out is out
    assert lane.link_lost is None
    t, _, _, good, *_ = lane.trace.seconds.between(0.0, 1e9)
    assert not np.any((t > 100.0) & (t < 130.0))
    assert np.all(good[t > 201.0] == NOT_TANK)


def test_a_fault_keeps_the_readings_that_made_it() -> None:
    text = invented.log_text(invented.bench(), factor=invented.bubbles(150.0, 260.0))
    lane = folded(text)
    span = next(span for span in lane.spans if span.what == "bubbles")
    assert span.raw is not None
    times, periods = span.raw
    assert len(times) == len(periods) > 40
    assert np.ptp(periods) > 0.15 * np.median(periods)
    assert "jumps up" in span.why
    good = lane.trace.seconds.between(0.0, 1e9)[3]
    assert DOUBTFUL in good


def test_times_are_moved_by_the_runs_offset() -> None:
    text = invented.log_text(invented.bench(), length_s=90.0, events=[Event(60.0, "dose", DOSE)])
    lane = folded(text, offset_s=1000.0)
    assert lane.t == 1089.0
    assert [dose.time_s for dose in lane.doses] == [1060.0]
    assert lane.trace.seconds.first_t == 1000.5


def test_without_standards_the_period_is_shown() -> None:
    lane = folded(invented.log_text(invented.bench(standards=False), length_s=60.0))
    assert not lane.calibrated
    assert lane.value == pytest.approx(893.0, rel=0.02)
    assert math.isnan(lane.u95)


def test_before_the_first_second_nothing_is_known() -> None:
    lane = Lane("p1", invented.bench())
    assert not lane.begun
    assert lane.tank == "t1"
    assert lane.calibrated
    assert math.isnan(lane.value)
    assert lane.rest is None
    assert lane.outlook is None
    assert lane.faults == []


def test_memory_is_bounded_however_long_it_runs() -> None:
    trace, raw = Trace(), Raw()
    for k in range(2 * SECONDS_MOST + 4000):
        second = Second(k)
        second.n_rows, second.mean_us, second.jitter = 50, 900.0, 0.001
        trace.add(second, 0.0, 0.08, 0.08, TANK)
        raw.add(second, 0.0)
    assert len(trace.seconds.columns[0]) < 2 * SECONDS_MOST
    assert trace.seconds.columns[0][-1] == 2 * SECONDS_MOST + 3999.5
    assert len(trace.minutes.columns[0]) < 2 * MINUTES_MOST
    assert sum(second.n_rows for _, second in raw.seconds) <= RAW_MOST


def test_a_minute_keeps_lowest_mean_and_highest_of_the_tanks_seconds() -> None:
    trace = Trace()
    for k in range(121):
        second = Second(k)
        second.n_rows, second.jitter = 4, 0.002
        good = NOT_TANK if k % 2 else TANK
        trace.add(second, 0.0, 0.08 + 0.0001 * (k % 60) + (1.0 if k % 2 else 0.0), 0.08, good)
    t, low, mean, high, share, jitter = trace.minutes.between(0.0, 1e9)
    assert t.tolist() == [30.0, 90.0]
    assert low == pytest.approx([0.08, 0.08])
    assert high == pytest.approx([0.0858, 0.0858])
    assert mean == pytest.approx([0.0829, 0.0829])
    assert share.tolist() == [0.5, 0.5]
    assert jitter == pytest.approx([0.002, 0.002])

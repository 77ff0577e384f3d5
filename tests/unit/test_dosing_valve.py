"""A valve's flow: what a few timed runs tell, and what is to be mistrusted in them."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.dosing.valve import FlowError, flow

GOOD = [(1.0, 5.1), (2.0, 10.0), (3.0, 15.2), (4.0, 19.9), (5.0, 24.9)]


@pytest.mark.parametrize("runs", [[], [(1.0, 0.0), (2.0, 0.0)]])
def test_runs_that_tell_nothing(runs: list[tuple[float, float]]) -> None:
    with pytest.raises(FlowError, match="expected"):
        flow(runs)


def test_good_runs_need_no_remark() -> None:
    found = flow(GOOD)
    assert found.remarks == ()
    assert found.lack_of_fit_p is None
    assert found.ml_per_s == pytest.approx(4.95, abs=0.05)


def test_the_doubt_of_the_flow_covers_the_truth() -> None:
    rng = np.random.default_rng(11)
    times = np.array([1.0, 2.0, 2.0, 4.0])
    slope = offset = dosed = 0
    for _ in range(600):
        found = flow(list(zip(times, 5.0 * times - 0.3 + rng.normal(0.0, 0.1, 4))))
        slope += abs(found.ml_per_s - 5.0) <= found.k * found.u_ml_per_s
        offset += abs(found.offset_ml + 0.3) <= found.k * found.u_offset_ml
        open_s, u = found.open_s(20.0), found.u_open_s(20.0)
        given = 5.0 * open_s - 0.3 + rng.normal(0.0, 0.1)
        dosed += abs(given - 20.0) <= found.k * found.volume(open_s)[1]
        assert u == pytest.approx(found.volume(open_s)[1] / found.ml_per_s)
    assert all(0.92 < count / 600 < 0.98 for count in (slope, offset, dosed))


def test_several_openings_share_the_flow_but_not_the_scatter() -> None:
    found = flow(GOOD)
    once, one_u = found.volume(4.0)
    twice, two_u = found.volume(4.0, times=2)
    assert twice == pytest.approx(once + found.offset_ml)
    assert 0.0 < two_u < 2.0 * one_u


def test_air_in_the_line_before_the_first_run() -> None:
    found = flow([(1.0, 3.6), (2.0, 10.1), (3.0, 15.2), (4.0, 19.9), (5.0, 25.0)])
    (said,) = found.remarks
    assert said.startswith("run 1 (1 s, 3.6 mL) gave 1.6 mL too little: air in the line")


def test_a_run_that_is_off_is_named() -> None:
    found = flow([(1.0, 5.0), (2.0, 10.1), (3.0, 15.0), (4.0, 23.0), (5.0, 25.0)])
    assert any(said.startswith("run 4 (4 s, 23 mL) is +3 mL off") for said in found.remarks)


def test_runs_that_are_too_short_or_too_few() -> None:
    assert any("shorter than 1 s" in said for said in flow([(0.5, 2.4), *GOOD]).remarks)
    two = flow([(1.0, 5.0), (5.0, 25.0)])
    assert any("two runs" in said for said in two.remarks)
    assert two.u_ml_per_s > 0.0


def test_a_flow_that_changes_with_open_time_does_not_fit() -> None:
    bent = [(t, 5.0 * t - 0.1 * t * t + e) for t in (1.0, 3.0, 6.0) for e in (0.02, -0.02)]
    found = flow(bent)
    assert found.lack_of_fit_p is not None
    assert found.lack_of_fit_p < 0.01
    assert any("does not fit" in said for said in found.remarks)


def test_runs_of_one_length_leave_the_offset_open() -> None:
    found = flow([(4.0, 19.9), (4.0, 20.1), (4.0, 20.0)])
    assert found.ml_per_s == pytest.approx(5.0)
    assert found.offset_ml == 0.0
    assert found.u_offset_ml == pytest.approx(0.5)
    assert found.volume(4.0)[1] < 0.15  # at the runs' own length the offset is in them
    assert found.volume(1.0)[1] > 0.3


def test_runs_on_a_line_are_no_better_than_a_cylinder() -> None:
    found = flow([(1.0, 5.0), (2.0, 10.0), (5.0, 25.0)])
    assert found.sd_ml == pytest.approx(0.025)


def test_a_valve_cannot_give_less_than_passes_at_opening() -> None:
    found = flow([(1.0, 7.0), (2.0, 12.1), (5.0, 27.0)])
    assert (found.open_s(1.5), found.u_open_s(1.5)) == (math.inf, math.inf)
    shrinking = flow([(1.0, 7.0), (2.0, 6.0), (3.0, 5.1)])
    assert shrinking.open_s(5.0) == math.inf


def test_air_shows_in_three_runs_too() -> None:
    found = flow([(1.0, 3.6), (2.0, 10.1), (5.0, 25.0)])
    assert any("air in the line" in said for said in found.remarks)
    assert flow([(1.0, 5.1), (2.0, 10.0), (5.0, 24.8)]).remarks == ()

"""The filtered trace: causal, its windows in seconds, gaps begin it anew."""

from __future__ import annotations

import math

import pytest

from monitor.signal.trace import TraceFilter


def test_a_step_is_followed_with_the_time_constant_asked_for() -> None:
    made = TraceFilter(1.0, 5.0)
    made.step(0, 0.0)
    after = [made.step(k, 1.0) for k in range(1, 21)]
    # first-order response: 1 - exp(-t/tau), elementary
    assert after == pytest.approx([1.0 - math.exp(-k / 5.0) for k in range(1, 21)], abs=1e-12)


def test_the_median_takes_out_a_spike() -> None:
    made = TraceFilter(3.0, 0.1)
    values = [made.step(k, 9.0 if k == 10 else 1.0) for k in range(20)]
    assert max(values) == pytest.approx(1.0)


def test_a_gap_begins_it_anew_and_nothing_stays_nothing() -> None:
    made = TraceFilter(1.0, 100.0)
    made.step(0, 1.0)
    assert math.isnan(made.step(1, math.nan))
    assert made.step(2, 2.0) < 1.1
    assert made.step(60, 2.0) == 2.0

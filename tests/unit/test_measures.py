"""Noise measures at their edges; their figures are checked in tests/reference."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.trust.measures import allan_deviation, hampel_bounds, mad_sd, middle


def test_the_middle_of_odd_and_even_counts() -> None:
    assert middle([1.0]) == 1.0
    assert middle([1.0, 2.0, 5.0]) == 2.0
    assert middle([1.0, 2.0, 4.0, 5.0]) == 3.0


def test_bounds_let_all_pass_where_most_are_equal() -> None:
    assert hampel_bounds([5.0] * 7 + [9.0]) == (-math.inf, math.inf)


def test_bounds_shut_a_bubble_out() -> None:
    values = [6.0 + 0.001 * (i % 5) for i in range(30)]
    low, high = hampel_bounds([*values, 6.2])
    assert low < min(values) <= max(values) < high < 6.2


def test_robust_scale_of_normal_values_is_their_sd() -> None:
    values = 3.0 * np.random.default_rng(1).standard_normal(20_000)
    assert mad_sd(values.tolist()) == pytest.approx(3.0, rel=0.03)


def test_allan_deviation_of_white_noise_falls_with_the_root_of_the_span() -> None:
    noise = np.random.default_rng(3).standard_normal(50_000) + 1e3
    assert allan_deviation(noise, 1) == pytest.approx(1.0, rel=0.03)
    assert allan_deviation(noise, 100) == pytest.approx(0.1, rel=0.15)

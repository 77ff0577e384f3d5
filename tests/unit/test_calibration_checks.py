"""Check standards: when the probe has moved, and when a new calibration is due."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.calibration.checks import DUE, Check, drift, e_n, moved, zeta


def check(days: float, off: float, u: float = 4e-4, noise: float = 3e-4) -> Check:
    """A check of a 0.1 % standard that reads off by a relative amount."""
    read = 0.1 * math.exp(off)
    return Check(days, 0.1, 0.1 * 5e-4, read, 0.1 * math.hypot(u, noise), 0.1 * noise)


def test_e_n_is_half_of_zeta_for_k_2() -> None:
    assert e_n(2.1, 0.06, 2.0, 0.04) == pytest.approx(zeta(2.1, 0.03, 2.0, 0.02) / 2)


def test_moved_at_once_when_far_off() -> None:
    assert moved([check(7, 0.004)])
    assert not moved([check(7, 0.0005)])
    assert not moved([])


def test_moved_after_two_to_the_same_side() -> None:
    off = 0.0016
    assert 1.0 < check(0, off).e_n < 1.5
    assert not moved([check(7, off)])
    assert moved([check(7, off), check(14, off)])
    assert moved([check(7, -off), check(14, -off)])
    assert not moved([check(7, off), check(14, -off)])
    assert not moved([check(7, off), check(14, off), check(21, 0.0)])


def test_a_steady_probe_is_not_due_and_a_drifting_one_is() -> None:
    steady = drift([check(7.0 * i, 0.0) for i in range(1, 5)])
    assert steady is not None
    assert not steady.due
    assert steady.due_days > 3
    weeks = [check(7.0 * i, 5e-4 * 7.0 * i) for i in range(1, 5)]
    found = drift(weeks)
    assert found is not None
    assert found.due
    assert found.rate_per_day == pytest.approx(5e-4, rel=0.2)
    assert found.offset == pytest.approx(0.014, rel=0.1)


def test_without_checks_nothing_is_said() -> None:
    assert drift([]) is None


def test_the_filter_is_the_least_squares_of_its_own_model() -> None:
    """One check: the posterior of two independent normal laws, in closed form."""
    found = drift([check(0.0, 0.001)])
    assert found is not None
    prior, noise = math.hypot(4e-4, 5e-4 * math.exp(-0.0)), 3e-4 / math.exp(0.001)
    shared = math.hypot(4e-4 * 0.1, 5e-4 * 0.1) / 0.1
    assert prior == pytest.approx(shared)
    weight = shared**2 / (shared**2 + noise**2)
    assert found.offset == pytest.approx(0.001 * weight, rel=1e-9)
    assert found.sd == pytest.approx(shared * math.sqrt(1 - weight), rel=1e-9)


def test_false_alarms_are_rare_and_drift_is_found() -> None:
    """A year of weekly checks; a drift of 0.05 % a day must be due before it is 0.7 % off."""
    rng = np.random.default_rng(11)
    false, found_at = 0, []
    for _ in range(40):
        common = rng.normal(0, math.hypot(4e-4, 5e-4))
        noise = rng.normal(0, 3e-4, 26)
        steady = [check(7.0 * i + 7, common + noise[i]) for i in range(8)]
        result = drift(steady)
        false += result is not None and result.due
        for i in range(1, 26):
            moving = [check(7.0 * j + 7, common + 5e-4 * (7 * j + 7) + noise[j]) for j in range(i)]
            result = drift(moving)
            assert result is not None
            if result.due:
                found_at.append(5e-4 * (7 * i))
                break
    assert false <= 4
    assert len(found_at) == 40
    assert np.median(found_at) < 2 * DUE + 5e-4 * 7

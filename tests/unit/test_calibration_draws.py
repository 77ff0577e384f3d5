"""A short form of the random calibrations: the doubt holds, and what is outside is flagged."""

from __future__ import annotations

import numpy as np
import pytest

from tests.calibration_draws import Result, report, run


@pytest.fixture(scope="module")
def result() -> Result:
    return run(60, 7)


def test_the_doubt_holds_and_is_not_wide(result: Result) -> None:
    error = np.abs(result.error)
    assert len(error) == 600
    assert (error <= result.u95).mean() >= 0.93
    assert np.median(error) < 1e-3
    assert np.median(result.u95) < 4 * np.quantile(error, 0.95)


def test_what_is_common_practice_is_worse(result: Result) -> None:
    error = np.median(np.abs(result.error))
    assert np.median(np.abs(result.common["line, S on P"])) > 50 * error
    assert np.median(np.abs(result.common["line, P on S"])) > 50 * error
    assert all(np.median(np.abs(other)) > 2 * error for other in result.common.values())


def test_what_is_outside_is_always_flagged(result: Result) -> None:
    assert result.flagged.all()
    assert result.held.all()


def test_the_report_tells_all_of_it(result: Result) -> None:
    said = report(result)
    for word in ("inside u95", "median", "95 %", "line, S on P", "flagged"):
        assert word in said

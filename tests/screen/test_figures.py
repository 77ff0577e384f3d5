"""Numbers and times as they are written: digits that follow the doubt, widths that keep still."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta, timezone

import gsw
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.screen.figures import (
    UNITS,
    VALUE_CELLS,
    Clock,
    Scale,
    length,
    places,
    short_text,
    value_text,
)

PCT = Scale("%")


@pytest.mark.parametrize(
    ("u95", "digits"),
    [(0.0004, 4), (0.0012, 4), (0.00019, 5), (0.0002, 4), (0.02, 2), (3.0, 0), (math.nan, 4)],
)
def test_one_digit_of_the_doubt_two_where_it_begins_with_one(u95: float, digits: int) -> None:
    assert places(u95) == digits


def test_no_figure_that_means_nothing() -> None:
    assert short_text(0.0931234, 0.0004, PCT) == "0.0931"
    assert short_text(0.0931234, 0.02, PCT) == "0.09"
    assert value_text(0.0931234, 0.0004, PCT).split() == ["0.0931", "±0.0004"]


@given(st.floats(0, 26), st.one_of(st.just(math.nan), st.floats(1e-6, 26)), st.sampled_from(UNITS))
def test_a_value_has_one_width(value: float, u95: float, unit: str) -> None:
    assert len(value_text(value, u95, Scale(unit))) == VALUE_CELLS
    assert len(value_text(math.nan, u95, Scale(unit))) == VALUE_CELLS


def test_the_point_stands_in_one_column() -> None:
    texts = [value_text(v, u, PCT) for v, u in ((0.0931, 0.0004), (12.5, 0.2), (3.14159, 1e-5))]
    assert {text.index(".") for text in texts} == {2}


def test_a_period_without_calibration_is_shown_in_us() -> None:
    assert value_text(16256.25, math.nan, Scale("us")).strip() == "16256.2"
    assert value_text(585.5, math.nan, Scale("us")).strip() == "585.5"


def test_units_are_those_of_the_water() -> None:
    assert Scale("g/kg").of(0.1) == pytest.approx(1.0)
    # TEOS-10 (gsw): reference salinity 10 g/kg is practical salinity 10 / (35.16504 / 35)
    expected = gsw.C_from_SP(10.0 * 35.0 / 35.16504, 25.0, 0.0)
    assert Scale("mS/cm", "sea salt").of(1.0) == pytest.approx(expected, rel=2e-3)
    assert math.isnan(Scale("mS/cm").of(26.0)) or Scale("mS/cm").of(26.0) > 0


@pytest.mark.parametrize(
    ("seconds", "said"),
    [
        (-3.0, "0 s"),
        (12.4, "12 s"),
        (720.0, "12 min"),
        (3.6e4, "10 h 00"),
        (7.5 * 86400, "8 days"),
        (math.nan, "?"),
    ],
)
def test_lengths_in_words(seconds: float, said: str) -> None:
    assert length(seconds) == said


def test_local_time_over_midnight_and_with_its_offset() -> None:
    zone = timezone(timedelta(hours=5, minutes=45))
    clock = Clock(datetime(2026, 3, 14, 18, 14, 50, tzinfo=UTC).astimezone(zone))
    assert clock.second(0.0) == "23:59:50"
    assert clock.second(15.0) == "00:00:05"
    assert clock.whole(15.0) == "00:00:05 +05:45  Sun 15 Mar 2026"
    assert clock.second(math.nan) == "23:59:50"
    assert clock.second(math.inf) == "23:59:50"

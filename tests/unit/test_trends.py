"""Trends: sign, size, doubt, causes, and when they are said."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.findings import Finding
from tests.unit.streams import Stream, dose


def trends(stream: Stream) -> list[Finding]:
    return [finding for finding in stream.judged()[0] if finding["finding"] == "trend"]


def rising(t: np.ndarray) -> np.ndarray:
    return 0.08 + 0.0016 * t / 3600.0


def test_evaporation_is_said_from_half_an_hour_on_and_hourly() -> None:
    said = trends(Stream(5.0, salinity=rising))
    assert 1800 <= said[0]["t"] <= 2700
    assert said[0]["likely"][0] == "evaporation"
    for finding in said:
        assert abs(finding["pct_per_h"] - 0.0016) <= finding["u95_pct_per_h"]
        assert finding["u95_pct_per_h"] < 0.5 * abs(finding["pct_per_h"])
        assert (finding["from_t"], finding["to_t"]) == (said[0]["from_t"], None)
    waits = np.diff([finding["t"] for finding in said])
    assert waits.min() >= 900
    assert waits.max() <= 3600


def test_a_fall_names_water_and_probe() -> None:
    said = trends(Stream(3.0, salinity=lambda t: 0.08 - 0.0016 * t / 3600.0))
    assert said[-1]["pct_per_h"] == pytest.approx(-0.0016, rel=0.1)
    assert {"top-up", "leak-in", "fouling", "wear"} <= set(said[0]["likely"])


@pytest.mark.parametrize(
    "stream",
    [
        Stream(5.0),
        Stream(5.0, noise=0.008),
        Stream(5.0, temp_c=lambda t: 25.0 + 0.8 * np.sin(t / 200.0)),
        Stream(5.0, temp_c=lambda t: 25.0 + 0.8 * np.sin(t / 200.0), thermometer=False),
        Stream(5.0, temp_c=lambda t: 25.0 + 0.15 * np.sin(t / 2000.0), thermometer=False),
    ],
    ids=["calm", "noisy", "thermostat", "blind thermostat", "blind room"],
)
def test_nothing_is_said_where_nothing_moves(stream: Stream) -> None:
    assert trends(stream) == []


def test_without_a_thermometer_temperature_is_among_the_causes_and_the_doubt() -> None:
    seen = trends(Stream(6.0, salinity=rising))
    blind = trends(Stream(6.0, salinity=rising, thermometer=False))
    assert blind[0]["likely"][-1] == "temperature"
    assert "temperature" not in seen[0]["likely"]
    assert blind[-1]["u95_pct_per_h"] > 2.0 * seen[-1]["u95_pct_per_h"]


def test_a_trend_goes_on_across_doses_and_is_silent_after_them() -> None:
    doses = [dose(5400.0, 100.0, 0.0), dose(10800.0, 100.0, 0.15, tank_ml=1100.0)]

    def salinity(t: np.ndarray) -> np.ndarray:
        return rising(t) - np.where(t > 5420, 0.007, 0.0) + np.where(t > 10820, 0.006, 0.0)

    said = trends(Stream(5.0, salinity=salinity, doses=doses))
    assert said[-1]["pct_per_h"] == pytest.approx(0.0016, rel=0.15)
    for finding in said:
        assert not any(each.end_s <= finding["t"] < each.end_s + 900 for each in doses)


def test_it_is_closed_when_the_water_stands_still_again() -> None:
    said = trends(Stream(6.0, salinity=lambda t: 0.08 + 0.0016 * np.minimum(t, 7200.0) / 3600.0))
    assert said[-1]["to_t"] == said[-1]["t"]
    assert 7200 < said[-1]["t"] < 7200 + 5400
    assert [finding["to_t"] for finding in said[:-1]] == [None] * (len(said) - 1)
    assert said[-1]["from_t"] == said[0]["from_t"]

"""Whatever standards are given: a calibration that can be kept and used, or one line of refusal."""

from __future__ import annotations

import json
import math

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.bench import Standard
from monitor.calibration import Calibration, CalibrationError, fit


def number(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high, allow_nan=False)


STANDARD = st.builds(
    Standard,
    salinity_pct=st.one_of(st.sampled_from([0.0, 0.025, 0.05, 0.1, 0.15]), number(0, 26)),
    period_us=st.one_of(number(200, 2000), number(1e-9, 1e9)),
    sd_us=st.one_of(st.none(), number(0, 50), number(0, 1e9)),
    readings=st.integers(1, 10_000_000),
    temp_c=st.one_of(st.none(), number(-5, 60)),
    salinity_u_pct=st.one_of(st.none(), number(0, 1), number(0, 1e9)),
)


@settings(max_examples=100, deadline=None)
@given(
    standards=st.lists(STANDARD, max_size=9),
    medium=st.sampled_from(["NaCl", "NaCl", "NaCl", "sea salt"]),
    tick_us=st.one_of(number(0, 2), number(0, 1e9)),
    periods=st.lists(st.floats(0, 1e12), min_size=1, max_size=20),
    temp=number(-5, 60),
)
def test_any_standards(
    standards: list[Standard], medium: str, tick_us: float, periods: list[float], temp: float
) -> None:
    refused = ""
    try:
        made = fit(standards, medium, tick_us)
    except CalibrationError as wrong:
        refused = str(wrong)
    assert "\n" not in refused
    if refused:
        return
    again = Calibration.from_event(json.loads(json.dumps(made.as_event(), allow_nan=False)))
    assert again == made
    period = np.array(periods)
    read = made.salinity_pct(period, np.full_like(period, temp))
    alone = [made.salinity_pct(period[i : i + 1], np.array([temp]))[0] for i in range(len(period))]
    assert np.array_equal(read, np.array(alone), equal_nan=True)
    assert not (read < 0).any()
    for value, p in zip(read.tolist(), periods):
        u = made.u_pct(p, temp)
        assert math.isnan(u) == math.isnan(value), (value, u, p, temp, made.theta)
        if not math.isnan(u):
            assert u >= 0

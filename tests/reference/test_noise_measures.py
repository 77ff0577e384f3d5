"""Noise measures and charts against handbook tables and reference libraries.

Each data file names its source in full.
"""

from __future__ import annotations

import csv
import json
import math
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import allantools
import numpy as np
import pytest
import scipy.stats
from statsmodels.robust import mad as statsmodels_mad

from monitor import bench
from monitor.blocks import Second
from monitor.trust import limits, measures
from monitor.trust.limits import Limits
from monitor.trust.measures import MAD_TO_SD, allan_deviation, hampel_bounds, mad_sd

DATA = Path(__file__).parent / "data"


def _json(name: str) -> Any:
    return json.loads((DATA / name).read_text(encoding="utf-8"))


def _rows(name: str) -> list[dict[str, str]]:
    with (DATA / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


# Allan deviation: Riley, Handbook of Frequency Stability Analysis, NIST SP 1065 (2008), 12.4


def test_allan_deviation_of_the_nbs14_ten_point_set() -> None:
    nbs14 = _json("allan_nbs14_10point.json")
    frequency = np.array(nbs14["frequency"])
    for m, published in zip(nbs14["taus"], nbs14["published"]["oadev"], strict=True):
        assert allan_deviation(frequency, m) == pytest.approx(published, rel=1e-6)


def test_allan_deviation_of_the_nbs14_thousand_point_set() -> None:
    nbs14 = _json("allan_nbs14_1000point.json")
    n, integers = 1234567890, []
    for _ in range(1000):
        integers.append(n)
        n = 16807 * n % 2147483647
    assert integers[:4] == nbs14["first_integers"]
    frequency = np.array(integers) / 2147483647
    for m, published in zip(nbs14["taus"], nbs14["published"]["oadev"], strict=True):
        assert allan_deviation(frequency, m) == pytest.approx(published, rel=5e-7)


def test_allan_deviation_agrees_with_allantools() -> None:
    noise = np.cumsum(np.random.default_rng(1).standard_normal(500)) * 0.1 + 6.0
    for m in (1, 3, 20, 200):
        _, expected, _, _ = allantools.oadev(noise, rate=1.0, data_type="freq", taus=[m])
        assert allan_deviation(noise, m) == pytest.approx(expected[0], rel=1e-9)
    assert math.isnan(allan_deviation(noise[:9], 5))


# Median absolute deviation


@pytest.mark.parametrize("example", _json("robust_statistics.json")["mad_examples"])
def test_mad_of_the_published_examples(example: dict[str, Any]) -> None:
    values = example["x"]
    n = len(values)
    factor = measures._MAD_FACTORS[n - 2] if n <= 9 else n / (n - 0.8)
    assert mad_sd(values) == pytest.approx(factor * MAD_TO_SD * example["MAD"], rel=1e-9)


def test_mad_agrees_with_scipy_and_statsmodels() -> None:
    values = np.random.default_rng(2).standard_t(3, 60)
    expected = 60 / 59.2 * scipy.stats.median_abs_deviation(values, scale="normal")
    assert mad_sd(values.tolist()) == pytest.approx(expected, rel=1e-9)
    assert mad_sd(values.tolist()) == pytest.approx(60 / 59.2 * statsmodels_mad(values), rel=1e-9)


@pytest.mark.parametrize("row", _rows("hampel_false_alarm.csv"))
def test_the_small_sample_factor_takes_the_bias_of_the_scaled_mad_away(row: dict[str, str]) -> None:
    n = int(row["window_n"])
    factor = measures._MAD_FACTORS[n - 2] if n <= 9 else n / (n - 0.8)
    assert factor * float(row["mean_scaled_MAD"]) == pytest.approx(1.0, abs=0.012)


@pytest.mark.parametrize("row", _rows("hampel_false_alarm.csv")[1:])
def test_hampel_bounds_flag_as_often_as_the_table_says(row: dict[str, str]) -> None:
    """The table is for a plain 1.4826 MAD; the small-sample factor is a wider t in its terms."""
    n = int(row["window_n"])
    factor = measures._MAD_FACTORS[n - 2] if n <= 9 else n / (n - 0.8)
    t, table = measures.HAMPEL_SDS * factor, [2.0, 3.0, 3.5, 4.0]
    flagged = [math.log(float(row[f"P_flag_t{each:g}"])) for each in table]
    expected = math.exp(float(np.interp(t, table, flagged)))
    draws = np.random.default_rng(n).standard_normal((20_000, n)).tolist()
    count = 0
    for values in draws:
        low, high = hampel_bounds(values)
        count += not low <= values[n // 2] <= high
    sd = math.sqrt(expected * len(draws))
    assert abs(count - expected * len(draws)) < 4 * sd + 0.03 * expected * len(draws)


# The smoothing that limits are judged by is an EWMA chart's


def _watch(bound: float) -> tuple[Limits, Any]:
    """A Limits whose band is -bound .. bound about 10, and a step that feeds it a value."""
    tank = bench.Tank(rest_band_pct=0.1, aim_pct=(10.0 - bound, 10.0 + bound))
    watched = Limits("p1", "t1", tank)
    trust = SimpleNamespace(usable=True, out=False, belief="believed")
    settling = SimpleNamespace(heading=0.0)

    def step(k: int, value: float) -> list[Any]:
        second = Second(k)
        second.salinity_pct = value
        return watched.step(second, 0.0, trust, settling)

    return watched, step


def test_the_smoothing_gives_the_ewma_of_the_nist_example() -> None:
    """NIST/SEMATECH e-Handbook 6.3.2.4; lambda 0.3 is the program's own."""
    example = _json("nist_ewma_example.json")
    assert example["lambda"] == limits.SMOOTH
    watched, step = _watch(1.0)
    step(0, example["target"])
    for k, (x, printed) in enumerate(zip(example["x"], example["ewma_printed"], strict=True), 1):
        step(k, x)
        assert watched._smooth == pytest.approx(printed, abs=0.00501)


@pytest.mark.parametrize(("column", "arl"), [("L_arl250", 250.0), ("L_arl500", 500.0)])
def test_false_limits_come_as_seldom_as_the_ewma_chart_says(
    column: str, arl: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Lucas & Saccucci, Technometrics 32, 1 (1990): run length of lambda 0.3 in white noise."""
    monkeypatch.setattr(limits, "BEGIN_S", 1)
    by_lambda = {float(row["lambda"]): row for row in _rows("ewma_L_for_arl0.csv")}
    lam = limits.SMOOTH
    bound = 0.01 * float(by_lambda[lam][column]) * math.sqrt(lam / (2.0 - lam))
    rng = np.random.default_rng(4)
    lengths = []
    for _ in range(400):
        _, step = _watch(bound)
        step(0, 10.0)
        k = 1
        while not step(k, 10.0 + 0.01 * rng.standard_normal()):
            k += 1
        lengths.append(k)
    assert np.mean(lengths) == pytest.approx(arl, rel=4.0 / math.sqrt(400))


# Slope and charts that the judges can be measured beside: not part of the program


def _theil_sen(times: list[float], values: list[float], z: float = 1.96) -> tuple[float, ...]:
    """Slope as the median of all pairwise slopes, and its confidence limits by Kendall's S.

    Parameters
    ----------
    times, values : (n,) n >= 2, times ascending and different
    z : normal quantile of the two-sided confidence

    Returns
    -------
    slope, low, high in values' unit per time's; the ranks of the limits are interpolated

    References
    ----------
    Gilbert, Statistical Methods for Environmental Pollution Monitoring (1987), ch. 16.5.
    """
    n = len(times)
    slopes = sorted(
        (values[j] - values[i]) / (times[j] - times[i]) for i in range(n) for j in range(i + 1, n)
    )
    ties: dict[float, int] = {}
    for value in values:
        ties[value] = ties.get(value, 0) + 1
    tied = sum(count * (count - 1) * (2 * count + 5) for count in ties.values() if count > 1)
    wide = z * math.sqrt((n * (n - 1) * (2 * n + 5) - tied) / 18.0)
    low, high = (_ranked(slopes, 0.5 * (len(slopes) + side)) for side in (-wide, wide + 2.0))
    return float(np.median(slopes)), low, high


def _ranked(ordered: list[float], rank: float) -> float:
    """Value of a fractional rank (the first is 1), the ends beyond them."""
    place = min(max(rank - 1.0, 0.0), len(ordered) - 1.0)
    below = int(place)
    above = min(below + 1, len(ordered) - 1)
    return ordered[below] + (place - below) * (ordered[above] - ordered[below])


def test_theil_sen_of_the_epa_sulfate_example() -> None:
    """US EPA Unified Guidance (2009), example 17-6."""
    example = _json("robust_statistics.json")["theil_sen"][0]
    slope, low, high = _theil_sen(example["x"], example["y"], z=float(scipy.stats.norm.ppf(0.975)))
    assert slope == pytest.approx(example["slope"], abs=1e-6)
    assert [low, high] == pytest.approx(example["ci95_gilbert"], abs=1e-5)


def test_theil_sen_of_helsel_and_hirsch_ignores_the_stray() -> None:
    example = _json("robust_statistics.json")["theil_sen"][1]
    assert _theil_sen(example["x"], example["y"])[0] == example["theil_slope"]
    ordinary = scipy.stats.linregress(example["x"], example["y"]).slope
    assert ordinary == pytest.approx(example["ols_slope"], abs=1e-6)


def test_theil_sen_agrees_with_scipy() -> None:
    rng = np.random.default_rng(3)
    times = np.cumsum(rng.uniform(0.5, 1.5, 40))
    values = 0.3 * times + rng.standard_normal(40)
    expected = scipy.stats.theilslopes(values, times, 0.95)
    slope, low, high = _theil_sen(times.tolist(), values.tolist())
    assert slope == pytest.approx(expected.slope, rel=1e-9)
    assert [low, high] == pytest.approx([expected.low_slope, expected.high_slope], abs=0.01)


def _cusum(values: Any, k: float, h: float) -> tuple[list[float], list[float], int]:
    """Upper and lower sums of a tabular CUSUM, and the first value beyond h (0: none)."""
    high, low, first = [0.0], [0.0], 0
    for i, value in enumerate(values, 1):
        high.append(max(0.0, high[-1] + value - k))
        low.append(max(0.0, low[-1] - value - k))
        if not first and max(high[-1], low[-1]) > h:
            first = i
    return high[1:], low[1:], first


def test_cusum_of_the_nist_example() -> None:
    """NIST/SEMATECH e-Handbook 6.3.2.3: signal at group 14."""
    rows = _rows("nist_cusum_example.csv")
    high, low, first = _cusum([float(row["x"]) - 325.0 for row in rows], 0.3175, 4.1959)
    assert first == 14
    for row, above, below in zip(rows, high, low, strict=True):
        assert above == pytest.approx(float(row["S_hi_printed"]), abs=0.0051)
        assert below == pytest.approx(float(row["S_lo_printed"]), abs=0.0051)


@pytest.mark.parametrize(
    "row",
    [
        row
        for row in _rows("arl_cusum.csv")
        if row["scheme"] == "two-sided" and row["shift_sigma"] in ("0", "1", "2")
    ],
)
def test_cusum_run_lengths(row: dict[str, str]) -> None:
    """Lucas & Crosier, Technometrics 24, 199 (1982), table 1."""
    k, h, shift = float(row["k"]), float(row["h"]), float(row["shift_sigma"])
    rng = np.random.default_rng(5)
    high, low = np.zeros(4000), np.zeros(4000)
    lengths, running, n = np.zeros(4000), np.ones(4000, bool), 0
    while running.any():
        n += 1
        values = rng.standard_normal(4000) + shift
        high, low = np.maximum(0.0, high + values - k), np.maximum(0.0, low - values - k)
        over = running & (np.maximum(high, low) > h)
        lengths[over] = n
        running &= ~over
    expected = float(row["arl_recomputed"])
    assert lengths.mean() == pytest.approx(expected, rel=4.0 / math.sqrt(4000))


@pytest.mark.parametrize("row", _rows("rstatistic_percentiles.csv"))
def test_r_statistic_percentiles(row: dict[str, str]) -> None:
    """Cao & Rhinehart, J. Process Control 5, 363 (1995)."""
    by_value, by_square, by_step = (float(row[f"lambda{i}"]) for i in (1, 2, 3))
    rng = np.random.default_rng(6)
    filtered, square, step = np.zeros(40_000), np.ones(40_000), 2.0 * np.ones(40_000)
    before = rng.standard_normal(40_000)
    for _ in range(int(12 / min(by_value, by_square, by_step))):
        value = rng.standard_normal(40_000)
        square += by_square * ((value - filtered) ** 2 - square)
        filtered += by_value * (value - filtered)
        step += by_step * ((value - before) ** 2 - step)
        before = value
    ratio = (2.0 - by_value) * square / step
    assert ratio.mean() == pytest.approx(float(row["mean"]), abs=0.01)
    assert np.percentile(ratio, 95) == pytest.approx(float(row["q95%"]), abs=0.02)

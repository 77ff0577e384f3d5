"""Fit and inverse: figures of a worked calibration, the doubt, the remarks and the refusals.

The worked figures were computed once by an independent program of the same model.
"""

from __future__ import annotations

import json
import math
import pickle
from collections.abc import Sequence
from typing import Any

import numpy as np
import pytest
from scipy.optimize import least_squares

from monitor.bench import Standard
from monitor.calibration import Calibration, CalibrationError, fit
from monitor.calibration.hypotheses import TAU_PCT, hypotheses_of
from monitor.calibration.model import evaluate, first_prior, solve
from monitor.calibration.readings import read_rows

SALINITY = [0.025, 0.05, 0.075, 0.1, 0.125, 0.15]
PERIOD = [1370.413, 715.648, 489.947, 374.923, 307.930, 260.240]
TEMP = [24.10, 23.95, 24.00, 24.20, 23.85, 24.05]


def standards(salinity: Sequence[float] = SALINITY, **more: Any) -> list[Standard]:
    """The worked standards, as (other) salinities call them."""
    return [
        Standard(
            salinity_pct=s,
            period_us=p,
            sd_us=round(0.0015 * p, 4),
            readings=120,
            temp_c=t,
            **more,
        )
        for s, p, t in zip(salinity, PERIOD, TEMP)
    ]


def read(calibration: Calibration, period_us: float, temp_c: float) -> float:
    return float(calibration.salinity_pct(np.array([period_us]), np.array([temp_c]))[0])


@pytest.fixture(scope="module")
def worked() -> Calibration:
    return fit(standards(), "NaCl", 0.5)


def test_rows_of_the_worked_standards(worked: Calibration) -> None:
    rows, jitter = read_rows(standards(), "NaCl", 0.5)
    k25 = [0.516140, 1.015399, 1.504851, 1.986979, 2.463194, 2.934430]
    np.testing.assert_allclose(rows.k25_ms, k25, atol=6e-7)
    assert rows.factor[0] == pytest.approx(0.981624, abs=6e-7)
    assert jitter == pytest.approx(0.00148573, abs=6e-9)
    w = np.sqrt(rows.reading_var - 1e-8)
    assert w[[0, -1]] == pytest.approx([1.360e-4, 1.448e-4], abs=6e-8)
    assert worked.k0_ms == pytest.approx(1.498599, abs=6e-7)


def test_one_hypothesis_of_the_worked_standards(worked: Calibration) -> None:
    rows, _ = read_rows(standards(), "NaCl", 0.5)
    one = np.ones((1, 6))
    fits = solve(rows, worked.k0_ms, one, np.array([0.06]), first_prior(min(PERIOD)))
    assert fits.theta[0] == pytest.approx(
        [11.36277, 6.156233, 0.978866, 2.6792e-4, 1.51976e-3], rel=2e-5
    )
    sd = np.sqrt(np.diag(np.linalg.inv(fits.a[0])))
    assert sd == pytest.approx([2.788, 0.006027, 0.006262, 0.002429, 0.000990], rel=6e-4)
    assert fits.q[0] == pytest.approx(1.40586, abs=6e-6)
    assert fits.variance[0, 0] == pytest.approx(4.07808e-7, rel=2e-6)


def test_the_fit_is_that_of_a_library(worked: Calibration) -> None:
    """SciPy's least_squares on the same weighted residuals and priors."""
    rows, _ = read_rows(standards(), "NaCl", 0.5)
    prior = first_prior(min(PERIOD))
    fits = solve(rows, worked.k0_ms, np.ones((1, 6)), np.array([0.06]), prior)

    def residuals(theta: Any) -> Any:
        period, _, _ = evaluate(theta[None], rows, worked.k0_ms)
        r = np.log(rows.period_us / period[0]) / np.sqrt(fits.variance[0])
        return np.concatenate([r, (theta - prior.mean) / prior.sd])

    start = prior.mean + [0, 6.0, 0, 0, 0]
    best = least_squares(residuals, start, x_scale=prior.sd.clip(max=1), xtol=1e-14, ftol=1e-14)
    sd = np.sqrt(np.diag(np.linalg.inv(fits.a[0])))
    assert np.abs((fits.theta[0] - best.x) / sd).max() < 1e-3


def test_the_whole_of_the_worked_standards(worked: Calibration) -> None:
    assert worked.scatter == pytest.approx(
        [0.47048, 0.44515, 0.07736, 0.00652, 0.00048, 0.00001], abs=6e-6
    )
    assert worked.theta == pytest.approx(
        [11.36471, 6.1562308, 0.9788739, 2.67781e-4, 1.522373e-3], rel=2e-6
    )
    sd = [math.sqrt(worked.cov[i][i]) for i in range(5)]
    assert sd == pytest.approx([2.68876, 0.00582547, 0.00603049, 0.00234803, 0.000988274], rel=2e-6)


@pytest.mark.parametrize(
    ("period", "temp", "salinity", "u95", "inside"),
    [
        (500, 24, 0.0734115, 6.22e-5, True),
        (900, 24, 0.0391088, 3.67e-5, True),
        (245, 24, 0.1606330, 2.30e-4, False),
        (340, 29, 0.1006699, 1.000e-4, True),
    ],
)
def test_worked_readings(
    worked: Calibration, period: float, temp: float, salinity: float, u95: float, inside: bool
) -> None:
    value, u = read(worked, period, temp), worked.u_pct(period, temp)
    assert value == pytest.approx(salinity, abs=6e-8)
    assert 2 * u == pytest.approx(u95, rel=2e-3)
    assert worked.inside(value, 2 * u) is inside
    assert worked.parts(period, temp).u_pct == pytest.approx(u, rel=1e-12)


def test_worked_slopes_and_step(worked: Calibration) -> None:
    slopes = worked.slopes(500.0, 24.0)
    assert slopes is not None
    expected = [1.587e-4, 0.0775465, 0.0028033, -1.0134e-4, -0.0514444]
    assert slopes.theta == pytest.approx(expected, rel=4e-4)
    step = read(worked, 500.0, 24.0) - read(worked, 560.0, 24.0)
    u_step = worked.u_step_pct(560.0, 24.0, 500.0, 24.0)
    assert step == pytest.approx(0.0084483, abs=6e-8)
    assert u_step == pytest.approx(6.24e-6, rel=2e-3)
    u = worked.u_pct(560.0, 24.0, 0.0), worked.u_pct(500.0, 24.0, 0.0)
    correlation = (u[0] ** 2 + u[1] ** 2 - u_step**2) / (2 * u[0] * u[1])
    assert correlation == pytest.approx(0.98216, abs=2e-4)
    assert worked.parts(340.0, 29.0).calibration == pytest.approx(3.65e-5, rel=2e-3)


def test_slopes_are_the_derivatives(worked: Calibration) -> None:
    slopes = worked.slopes(500.0, 27.0)
    assert slopes is not None
    ln_p = 1e-5
    up, down = read(worked, 500 * math.exp(ln_p), 27.0), read(worked, 500 * math.exp(-ln_p), 27.0)
    assert slopes.of_ln_p == pytest.approx((up - down) / (2 * ln_p), rel=1e-5)
    warmer, cooler = read(worked, 500.0, 27.01), read(worked, 500.0, 26.99)
    assert -slopes.z * slopes.sensitivity == pytest.approx((warmer - cooler) / 0.02, rel=1e-5)


def test_a_wrong_standard_is_named_and_weighs_little() -> None:
    wrong = [*SALINITY]
    wrong[2] = 0.07725
    made = fit(standards(wrong), "NaCl", 0.5)
    named = "the 0.07725 % standard is wrong: period 2.7 +- 0.16 % longer than the others say"
    assert any(line.startswith(named) for line in made.remarks)
    assert read(made, 500.0, 24.0) == pytest.approx(0.0734383, abs=6e-8)
    assert 2 * made.u_pct(500.0, 24.0) == pytest.approx(8.92e-5, rel=2e-3)


def test_any_number_of_values_gives_the_same_bits(worked: Calibration) -> None:
    rng = np.random.default_rng(5)
    period, temp = rng.uniform(200, 3000, 1001), rng.uniform(15, 33, 1001)
    whole = worked.salinity_pct(period, temp)
    for size in (1, 2, 3, 7, 64, 500):
        cut = [
            worked.salinity_pct(period[i : i + size], temp[i : i + size])
            for i in range(0, 1001, size)
        ]
        assert np.array_equal(np.concatenate(cut), whole)
    every_third = worked.salinity_pct(period[::3], temp[::3])
    assert np.array_equal(every_third, whole[::3])


def test_where_there_is_no_salinity_there_is_none(worked: Calibration) -> None:
    period = np.array([np.nan, 500.0, 0.0, 8.0, 11.5, 60.0, -3.0])
    temp = np.array([24.0, np.nan, 24.0, 24.0, 24.0, 24.0, 24.0])
    assert np.isnan(worked.salinity_pct(period, temp)).all()
    for p, t in zip(period.tolist(), temp.tolist()):
        assert math.isnan(worked.u_pct(p, t))
        assert math.isnan(worked.u_step_pct(500.0, 24.0, p, t))


def test_near_zero_it_stays_at_zero_and_says_its_doubt(worked: Calibration) -> None:
    assert read(worked, 5e5, 24.0) == 0.0
    near = read(worked, 1e5, 24.0)
    assert 0 <= near < 0.001
    assert worked.u_pct(1e5, 24.0) > near / 6
    assert not worked.inside(near, 2 * worked.u_pct(1e5, 24.0))


def test_there_and_back(worked: Calibration) -> None:
    for salinity in (0.0, 0.001, 0.03, 0.1, 0.2):
        assert read(worked, worked.period_us(salinity, 22.0), 22.0) == pytest.approx(
            salinity, rel=1e-7, abs=1e-9
        )


def test_an_event_keeps_every_bit(worked: Calibration) -> None:
    again = Calibration.from_event(json.loads(json.dumps(worked.as_event(), allow_nan=False)))
    assert again == worked
    assert again.as_event() == worked.as_event()
    copied = pickle.loads(pickle.dumps(worked))
    assert copied == worked
    assert copied.u_pct(500.0, 24.0) == again.u_pct(500.0, 24.0) == worked.u_pct(500.0, 24.0)


@pytest.mark.parametrize(
    "change",
    [
        {"theta": [1.0, 2.0]},
        {"theta": None},
        {"cov": [[float("nan")] * 5] * 5},
        {"medium": "sugar"},
        {"k0_ms": "much"},
    ],
)
def test_a_wrong_event_is_refused_in_one_line(worked: Calibration, change: dict[str, Any]) -> None:
    with pytest.raises(CalibrationError) as refused:
        Calibration.from_event(worked.as_event() | change)
    assert "\n" not in str(refused.value)
    missing = worked.as_event()
    del missing[next(iter(change))]
    with pytest.raises(CalibrationError, match="missing"):
        Calibration.from_event(missing)


def test_a_changed_model_has_a_new_name(worked: Calibration) -> None:
    assert fit(standards(), "NaCl", 0.5).name == worked.name
    assert fit(standards(), "NaCl", 1.0).name != worked.name
    assert fit(standards(lot="b"), "NaCl", 0.5).name != worked.name
    assert fit(standards(set="spring"), "NaCl", 0.5).name.startswith("spring")
    assert fit(standards(), "NaCl", 0.5, "mine").name == "mine"


@pytest.mark.parametrize("n", [1, 2, 3])
def test_few_standards_give_a_wide_answer(n: int) -> None:
    few = fit([standards()[i] for i in (2, 5, 0)[:n]], "NaCl", 0.5)
    all_six = fit(standards(), "NaCl", 0.5)
    value, wide = read(few, 500.0, 24.0), few.u_pct(500.0, 24.0)
    assert wide > 1.2 * all_six.u_pct(500.0, 24.0)
    assert abs(value - read(all_six, 500.0, 24.0)) < 2 * wide
    assert any("only" in line for line in few.remarks)


def test_equal_standards_serve_where_they_are() -> None:
    same = [standards()[2]] * 6
    made = fit(same, "NaCl", 0.5)
    assert read(made, PERIOD[2], TEMP[2]) == pytest.approx(SALINITY[2], rel=2e-3)
    u = [made.u_pct(p, 24.0) / read(made, p, 24.0) for p in (PERIOD[2], PERIOD[0])]
    assert u[1] > 10 * u[0]


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({2: {"period_us": 715.648}, 1: {"period_us": 489.947}}, "contradict"),
        ({2: {"period_us": 489947.0}, 0: {"period_us": 1370413.0}}, "another unit than us"),
    ],
)
def test_what_contradicts_is_refused_in_one_line(
    change: dict[int, dict[str, Any]], said: str
) -> None:
    given = [s.model_copy(update=change.get(i, {})) for i, s in enumerate(standards())]
    with pytest.raises(CalibrationError, match=said) as refused:
        fit(given, "NaCl", 0.5)
    assert "\n" not in str(refused.value)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"period_us": 0.0}, "standard 1: period 0 us; expected above 0"),
        ({"period_us": -3.0}, "expected above 0"),
        ({"period_us": math.nan}, "expected above 0"),
        ({"period_us": 1.370413}, "standard 1: period 1.37041 us: looks like ms or s"),
        ({"salinity_pct": -0.1}, "standard 1: salinity -0.1 %; expected 0 or more"),
        ({"salinity_pct": 3.5}, "beyond the law of NaCl; expected at most 0.26 %"),
        ({"temp_c": 85.0}, "standard 1: temp_c 85; expected -5 to 60"),
    ],
)
def test_wrong_figures_are_refused_in_one_line(change: dict[str, float], said: str) -> None:
    first, *others = standards()
    with pytest.raises(CalibrationError, match=said):
        fit([first.model_copy(update=change), *others], "NaCl", 0.5)


def test_no_standards_and_no_medium_are_refused() -> None:
    with pytest.raises(CalibrationError, match="no standards"):
        fit([], "NaCl", 0.5)
    with pytest.raises(CalibrationError, match="expected one of NaCl, sea salt"):
        fit(standards(), "sugar", 0.5)


def test_one_absurd_standard_is_named() -> None:
    given = standards()
    given[3] = given[3].model_copy(update={"period_us": 3749.23})
    made = fit(given, "NaCl", 0.5)
    assert any("the 0.1 % standard is wrong" in line for line in made.remarks)
    assert read(made, 500.0, 24.0) == pytest.approx(0.07341, rel=2e-3)


def test_missing_temperatures_widen() -> None:
    some = [
        s.model_copy(update={"temp_c": None}) if i == 1 else s for i, s in enumerate(standards())
    ]
    made = fit(some, "NaCl", 0.5)
    assert any("1 standards without temperature" in line for line in made.remarks)
    none = fit([s.model_copy(update={"temp_c": None}) for s in standards()], "NaCl", 0.5)
    assert any("no standard has a temperature" in line for line in none.remarks)
    value = read(none, 500.0, 25.0)
    assert none.u_pct(500.0, 25.0) / value == pytest.approx(0.0205, rel=0.06)  # 1 C, 2 %/C


def test_repeats_show_lack_of_fit() -> None:
    """Two readings of each level that agree, at levels that no probe's law joins."""
    rng = np.random.default_rng(2)
    bent = np.array([0.0, 0.002, -0.002, 0.002, -0.002, 0.0])

    def named(bend: Any, noise: float) -> bool:
        given = [
            s.model_copy(
                update={"period_us": s.period_us * (1 + b + noise * rng.standard_normal())}
            )
            for s, b in zip(standards(), bend)
            for _ in range(2)
        ]
        return any("lack of fit" in line for line in fit(given, "NaCl", 0.5).remarks)

    assert named(bent, 1e-4)
    assert sum(named(np.zeros(6), 1e-3) for _ in range(60)) <= 8  # 5 % by chance


def test_repeats_are_doubted_alone_too() -> None:
    rows, _ = read_rows([*standards(), standards()[0]], "NaCl", 0.5)
    hypotheses = hypotheses_of(rows, None)
    assert len(hypotheses.groups) == 8
    assert hypotheses.groups[0] == (0, 6)
    assert len(hypotheses.use) == 9 * len(TAU_PCT)
    assert np.exp(hypotheses.ln_prior).sum() == pytest.approx(1.0)


def test_renewing_takes_the_older_calibration_along(worked: Calibration) -> None:
    drifted = [s.model_copy(update={"period_us": s.period_us * 1.01}) for s in standards()]
    new = drifted[1:2]
    alone, renewed = fit(new, "NaCl", 0.5), fit(new, "NaCl", 0.5, older=worked)
    truth = read(fit(drifted, "NaCl", 0.5), 400.0, 24.0)
    assert renewed.u_pct(400.0, 24.0) < alone.u_pct(400.0, 24.0) / 2
    assert abs(read(renewed, 400.0, 24.0) - truth) < 2 * renewed.u_pct(400.0, 24.0)
    with pytest.raises(CalibrationError, match="sea salt"):
        fit(new, "sea salt", 0.5, older=worked)


def test_sea_salt_has_its_own_law(worked: Calibration) -> None:
    sea = fit(standards(), "sea salt", 0.5)
    assert read(sea, 500.0, 24.0) == pytest.approx(read(worked, 500.0, 24.0), rel=0.01)
    assert read(sea, 500.0, 30.0) != pytest.approx(read(worked, 500.0, 30.0), rel=1e-5)
    assert sea.u_pct(500.0, 24.0) == pytest.approx(worked.u_pct(500.0, 24.0), rel=0.1)

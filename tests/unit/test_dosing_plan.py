"""The next dose: liquid, amount, open time, landing, parts; what is refused; what is warned of."""

from __future__ import annotations

import math
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.bench import Bench, Liquid, Probe, Tank, Valve
from monitor.dosing.advice import cautions
from monitor.dosing.balance import Known, landing
from monitor.dosing.parts import PlanError
from monitor.dosing.plan import Plan, plan

RUNS = ((1.0, 5.1), (2.0, 10.0), (5.0, 24.8))


def bench(valves: bool = False, **tank: Any) -> Bench:
    settings = {"rest_band_pct": 0.001, "volume_ml": 1200.0, "volume_u_ml": 6.0, **tank}
    return Bench(
        probe={"p1": Probe(tank="t1")},
        tank={"t1": Tank.model_validate(settings)},
        liquid={
            "saline": Liquid(salinity_pct=0.15, salinity_u_pct=0.0005),
            "deionised": Liquid(salinity_pct=0.0, salinity_u_pct=0.0001),
            "stock": Liquid(salinity_pct=20.0, salinity_u_pct=0.02),
        },
        valve={"v1": Valve(liquid="saline", runs=RUNS)} if valves else {},
    )


def said(settings: Bench, made: Plan) -> str:
    return "\n".join(cautions(settings, made))


def test_towards_an_aim() -> None:
    made = plan(bench(), "t1", None, 0.08, 0.0004, aim_pct=0.09)
    assert made.liquid == "saline"  # of the stock it would take half a mL
    assert made.volume_ml == pytest.approx(200.0)
    assert made.open_s is None
    assert made.predicted_pct == pytest.approx(0.09)
    assert made.others["stock"] == pytest.approx(0.525, abs=0.001)


def test_what_takes_least_is_chosen_where_it_can_be_measured_out() -> None:
    made = plan(bench(), "t1", None, 0.08, aim_pct=0.14)
    assert made.liquid == "stock"
    assert made.volume_ml == pytest.approx(3.15, abs=0.01)


def test_downwards_and_by_name() -> None:
    assert plan(bench(), "t1", None, 0.1, aim_pct=0.09).liquid == "deionised"
    named = plan(bench(), "t1", None, 0.08, aim_pct=0.09, liquid="stock")
    assert named.liquid == "stock"
    assert not named.others


@pytest.mark.parametrize("mode", ["grows", "overflows"])
def test_a_given_volume_lands_by_mass_balance(mode: str) -> None:
    made = plan(bench(mode=mode), "t1", None, 0.08, 0.0004, liquid="saline", volume_ml=52.5)
    known = landing(
        mode, Known(0.08, 0.0002), Known(1200, 6), Known(0.15, 0.0005), Known(52.5, 0.525)
    )
    assert made.predicted_pct == known.value
    assert made.predicted_u95_pct == pytest.approx(2 * known.u)
    assert [part.volume_ml for part in made.parts] == [52.5]


def test_through_a_valve() -> None:
    made = plan(bench(valves=True), "t1", None, 0.08, aim_pct=0.085)
    assert made.valve == "v1"
    assert made.open_s == pytest.approx((made.volume_ml - 0.1615) / 4.9269, rel=1e-3)
    by_hand = plan(bench(), "t1", None, 0.08, aim_pct=0.085)
    assert made.volume_u95_ml != by_hand.volume_u95_ml


def test_the_tank_as_it_is_now() -> None:
    fuller = plan(bench(), "t1", 1500.0, 0.08, aim_pct=0.09)
    assert fuller.volume_ml == pytest.approx(250.0)
    assert plan(bench(), "t1", math.nan, 0.08, aim_pct=0.09).volume_ml == pytest.approx(200.0)


def test_parts_keep_to_the_fastest_change() -> None:
    settings = bench(valves=True, fastest_pct_per_h=0.02)
    made = plan(settings, "t1", None, 0.07, aim_pct=0.1, liquid="saline")
    assert len(made.parts) == 6
    assert made.parts[0].wait_s == 0.0
    assert sum(part.volume_ml for part in made.parts) == pytest.approx(made.volume_ml)
    assert sum(part.open_s or 0.0 for part in made.parts) == pytest.approx(made.open_s)
    assert made.change_pct / (made.lasts_s / 3600) <= 0.02 * (1 + 1e-9)
    level, tank_ml = 0.07, 1200.0
    for part in made.parts:
        landed = landing(
            "grows", Known(level, 0), Known(tank_ml, 0), Known(0.15, 0), Known(part.volume_ml, 0)
        )
        assert landed.value == pytest.approx(part.predicted_pct, rel=1e-9)
        assert landed.value - level <= 0.005 * (1 + 1e-9)
        level, tank_ml = landed.value, tank_ml + part.volume_ml
    assert level == pytest.approx(made.predicted_pct, rel=1e-9)


def test_a_small_change_is_one_dose() -> None:
    settings = bench(fastest_pct_per_h=0.02)
    assert len(plan(settings, "t1", None, 0.08, aim_pct=0.085).parts) == 1
    assert len(plan(settings, "t1", None, 0.08, aim_pct=0.0851).parts) == 2


@given(
    st.sampled_from(["grows", "overflows"]),
    st.floats(0.001, 0.149),
    st.floats(0.001, 0.149),
    st.floats(0.001, 0.5),
)
def test_every_plan_adds_up_or_is_refused(
    mode: str, now: float, aim: float, fastest: float
) -> None:
    settings = bench(valves=True, mode=mode, fastest_pct_per_h=fastest)
    try:
        made = plan(settings, "t1", None, now, 0.0004, aim_pct=aim)
    except PlanError:
        return
    assert made.predicted_pct == pytest.approx(aim, rel=1e-9)
    assert sum(part.volume_ml for part in made.parts) == pytest.approx(made.volume_ml)
    assert made.parts[-1].predicted_pct == pytest.approx(aim, rel=1e-9)
    assert made.predicted_u95_pct > 0.0
    if len(made.parts) > 1:
        assert abs(made.change_pct) <= fastest * made.lasts_s / 3600 * (1 + 1e-9)
    assert all(text.isascii() and "\n" not in text for text in cautions(settings, made))


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        ({"aim_pct": 21.0}, "at hand: saline 0.15 %, deionised 0 %, stock 20 %"),
        ({"aim_pct": 0.2, "liquid": "saline"}, "expected a liquid saltier than 0.2 %"),
        ({"aim_pct": 0.05, "liquid": "saline"}, "expected a liquid fresher than 0.05 %"),
        ({"aim_pct": 0.08}, "already"),
        ({"aim_pct": 0.1499, "liquid": "saline"}, "more than doubles it"),
        ({"liquid": "saline", "volume_ml": 1300.0}, "more than doubles it"),
        ({}, "no aim"),
    ],
)
def test_refusals_are_one_line(words: dict[str, Any], expected: str) -> None:
    with pytest.raises(PlanError) as refused:
        plan(bench(), "t1", None, 0.08, **words)
    assert expected in str(refused.value)
    assert "\n" not in str(refused.value)


def test_refused_without_volume_salinity_or_patience() -> None:
    with pytest.raises(PlanError, match="volume_ml"):
        plan(bench(volume_ml=None), "t1", None, 0.08, aim_pct=0.09)
    with pytest.raises(PlanError, match="no salinity"):
        plan(bench(), "t1", None, math.nan, aim_pct=0.09)
    with pytest.raises(PlanError, match=r"takes 600 h"):
        plan(bench(fastest_pct_per_h=0.0001), "t1", None, 0.08, aim_pct=0.14)


def test_few_runs_of_a_valve_widen_the_doubt_of_the_landing() -> None:
    few = plan(bench(valves=True), "t1", None, 0.08, liquid="saline", volume_ml=50.0)
    noisy = ((1.0, 5.6), (2.0, 9.0), (5.0, 25.1))
    settings = bench(valves=True)
    settings = settings.model_copy(update={"valve": {"v1": Valve(liquid="saline", runs=noisy)}})
    worse = plan(settings, "t1", None, 0.08, liquid="saline", volume_ml=50.0)
    assert worse.predicted_u95_pct > 4 * few.predicted_u95_pct
    assert worse.volume_u95_ml > 12 * 2.0  # one degree of freedom: k = 12.7


def test_cautions_where_the_risk_is() -> None:
    quiet = bench(fastest_pct_per_h=0.1)
    small = plan(quiet, "t1", None, 0.08, 0.0001, liquid="saline", volume_ml=20.0)
    assert said(quiet, small).splitlines() == [
        "The tank will hold 1220 mL after it: is there room?",
        "The dose is taken as measured out to 1 % (common practice).",
    ]
    settings = bench(valves=True, aim_pct=(0.09, 0.11))
    made = plan(settings, "t1", None, 0.04, 0.0, aim_pct=0.2)
    text = said(settings, made)
    assert "within minutes" in text
    assert "A fast change of salinity can kill stock" in text
    assert "outside the tank's aim_pct" in text
    assert "zebrafish, adult, laboratory: highest 0.075 %" in text
    assert "second instrument" in text
    assert "volumes in their place" in text  # the stock is 15 % heavier than the tank's water
    assert "taken as exact" in text


def test_cautions_of_a_valve() -> None:
    settings = bench(valves=True)
    long = plan(settings, "t1", None, 0.08, 0.0001, liquid="saline", volume_ml=100.0)
    assert "An unattended valve can flood or empty a tank" in said(settings, long)
    assert "timed for 5 s at most" in said(settings, long)
    short = plan(settings, "t1", None, 0.08, 0.0001, liquid="saline", volume_ml=3.0)
    assert "under 1 s" in said(settings, short)
    assert "hard to measure out" in said(
        bench(), plan(bench(), "t1", None, 0.08, liquid="saline", volume_ml=0.5)
    )


def test_a_change_within_the_doubt_is_said() -> None:
    made = plan(bench(), "t1", None, 0.08, 0.001, aim_pct=0.0805)
    assert "nobody can tell whether it is needed" in said(bench(), made)


def test_an_overflowing_tank_runs_over() -> None:
    settings = bench(mode="overflows")
    made = plan(settings, "t1", None, 0.08, aim_pct=0.09)
    assert "run over" in said(settings, made)

"""Fouling: found, not confused, ended, and decided by doses."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest

from monitor import bench
from monitor.blocks import Floats, Second
from monitor.findings import Finding
from monitor.trust.intake import floor_us
from monitor.trust.judge import Trust
from monitor.trust.minutes import MOST, Minutes, fit
from monitor.trust.slow import Creep
from tests.unit.streams import FLOOR_US, STANDARDS, Stream, dose

BEGAN = 3600.0


def film(rate_per_h: float, wiped_t: float = math.inf):  # type: ignore[no-untyped-def]
    """ln period that a film adds, from BEGAN on, until it is wiped off."""

    def risen(t: Floats) -> Floats:
        return np.where(t < wiped_t, rate_per_h * np.maximum(t - BEGAN, 0.0) / 3600.0, 0.0)

    return risen


def faults(found: list[Finding]) -> list[Finding]:
    return [finding for finding in found if finding["finding"] == "fault"]


def test_a_film_is_found_before_it_has_cost_two_per_cent() -> None:
    (said,) = faults(Stream(2.0, film=film(0.03)).judged()[0])
    assert said["fault"] == "fouling"
    assert said["to_t"] is None
    assert said["t"] - BEGAN < 0.02 / 0.03 * 3600
    assert abs(said["from_t"] - BEGAN) < 300
    for word in ("film", "fresh water", "wipe", "check standard", "level"):
        assert word in said["evidence"]


def test_a_slow_film_is_found_within_ninety_minutes() -> None:
    (said,) = faults(Stream(3.0, film=film(0.006)).judged()[0])
    assert said["t"] - BEGAN < 5400


@pytest.mark.parametrize(
    "stream",
    [
        Stream(6.0),
        Stream(6.0, noise=0.008),
        Stream(6.0, salinity=lambda t: 0.08 * (1.0 + 0.02 * t / 3600)),
        Stream(6.0, temp_c=lambda t: 25.0 + 0.8 * np.sin(t / 200.0)),
        Stream(6.0, temp_c=lambda t: 25.0 - 0.7 * t / 3600),
        Stream(6.0, temp_c=lambda t: 25.0 + 0.8 * np.sin(t / 200.0), thermometer=False),
        Stream(3.0, temp_c=lambda t: 25.0 - 0.5 * t / 3600, thermometer=False),
    ],
    ids=["calm", "noisy", "evaporation", "thermostat", "cooling", "blind", "blind cooling"],
)
def test_nothing_else_is_called_fouling(stream: Stream) -> None:
    assert faults(stream.judged()[0]) == []


def test_the_tail_of_a_slow_mixing_is_no_film() -> None:
    poured = dose(3600.0, 200.0, 0.0)
    landing, _ = poured.landing(0.08, 0.0)

    def diluted(t: Floats) -> Floats:
        tail = np.exp(-np.maximum(t - 3620.0, 0.0) / 900.0)
        return np.where(t < 3600.0, 0.08, landing + 0.2 * (0.08 - landing) * tail)

    assert faults(Stream(3.0, salinity=diluted, doses=[poured]).judged()[0]) == []


def test_without_a_thermometer_a_film_must_beat_a_cooling_by_two_kelvin() -> None:
    (said,) = faults(Stream(5.0, film=film(0.03), thermometer=False).judged()[0])
    assert 0.03 * (said["t"] - BEGAN) / 3600 > 0.04
    assert "no thermometer" in said["evidence"]
    known = Stream(5.0, film=film(0.03), thermometer=False, temp_u_c=0.2)
    assert faults(known.judged()[0])[0]["t"] < said["t"]


def test_without_standards_there_are_faults_and_no_trends() -> None:
    stream = Stream(3.0, film=film(0.03))
    stream.probe = bench.Probe(tank="t1")
    stream.read_pct = stream.read_pct * np.nan
    found, creep = stream.judged()
    assert [finding["finding"] for finding in found] == ["fault"]
    assert creep.cost == pytest.approx(0.03 * 2.0, rel=0.1)


@pytest.mark.parametrize("out", [None, (9000, 9120)], ids=["in place", "taken out"])
def test_wiping_ends_it(out: tuple[int, int] | None) -> None:
    said, ended = faults(Stream(4.0, film=film(0.03, wiped_t=9000.0), out=out).judged()[0])
    assert ended["to_t"] == pytest.approx(9000.0, abs=60.0)
    assert ended["from_t"] == said["from_t"]
    assert "withdrawn" not in ended


def test_it_ends_when_the_slope_is_gone() -> None:
    stream = Stream(5.0, film=lambda t: 0.03 * np.clip(t - BEGAN, 0.0, 3600.0) / 3600.0)
    said, ended = faults(stream.judged()[0])
    assert said["to_t"] is None
    assert ended["to_t"] == pytest.approx(7200.0, abs=900.0)


def doses_while(film_rate: float, leak_rate: float) -> tuple[list[Finding], Creep]:
    """Two saline doses, at 3 and 4 h, while one or the other creeps on from BEGAN."""
    doses = [dose(10800.0, 250.0, 0.15), dose(14400.0, 250.0, 0.15, tank_ml=1250.0)]

    def salinity(t: Floats) -> Floats:
        water = 0.08 * np.exp(-leak_rate * np.maximum(t - BEGAN, 0.0) / 3600.0)
        for each in doses:
            k = int(each.time_s)
            step = each.landing(float(water[k]), 0.0)[0] - float(water[k])
            water = water + step * (1.0 - np.exp(-np.maximum(t - each.time_s - 10.0, 0.0) / 20.0))
        return np.asarray(water)

    return Stream(5.0, salinity=salinity, film=film(film_rate), doses=doses).judged()


def test_doses_confirm_a_film() -> None:
    found, creep = doses_while(0.03, 0.0)
    assert len(faults(found)) == 1
    assert creep.cause == "fouling"
    assert creep.fault is not None
    assert "through a film" in creep.fault["evidence"]


def test_doses_withdraw_what_is_fresh_water() -> None:
    found, creep = doses_while(0.0, 0.03)
    said, ended = faults(found)
    assert ended["from_t"] == said["from_t"]
    assert "clean electrodes" in ended["withdrawn"]
    assert creep.cause == "water"
    last = [finding for finding in found if finding["finding"] == "trend"][-1]
    assert last["likely"][0] == "leak-in"


def test_a_short_dose_alone_is_no_film() -> None:
    """A weak answer without a creep: half of the saline never reached the tank."""
    given = dose(3600.0, 200.0, 0.15)
    half = dose(3600.0, 100.0, 0.15).landing(0.08, 0.0)[0]
    stream = Stream(3.0, salinity=lambda t: np.where(t < 3620.0, 0.08, half), doses=[given])
    assert faults(stream.judged()[0]) == []


def test_a_restart_keeps_the_creep_and_its_cost() -> None:
    stream = Stream(4.0, film=film(0.03, wiped_t=12000.0))
    creep = Creep("p1", stream.probe)
    said: list[Finding] = []
    for second, level, changes in stream.seconds():
        if second.k == 9000:
            break
        said += creep.step(second, level, changes)
    carried = json.loads(json.dumps(creep.carry()))
    assert creep.cost == pytest.approx(0.03 * 1.5, rel=0.05)
    ended = faults(stream.judged(carried, first_k=9000)[0])[0]
    assert ended["from_t"] == said[0]["from_t"]
    assert ended["to_t"] == pytest.approx(12000.0, abs=60.0)


def test_after_a_restart_the_judge_says_it_again_and_doubts() -> None:
    stream = Stream(3.0, film=film(0.03))
    creep = Creep("p1", stream.probe)
    said: list[Finding] = []
    for second, level, changes in stream.seconds():
        said += creep.step(second, level, changes)
    judge = Trust("p1", stream.probe, json.loads(json.dumps({"creep": creep.carry()})))
    again, belief = judge.step(Second(0), ())
    assert again == {**said[0], "t": 1.0}
    assert (belief["belief"], judge.belief) == ("doubtful", "doubtful")
    assert judge.faults.keys() == {"fouling"}


def test_the_floor_is_the_standards_intercept() -> None:
    assert floor_us(STANDARDS) == pytest.approx(FLOOR_US, abs=1e-6)
    assert floor_us(STANDARDS[:1]) == 0.0
    assert floor_us(()) == 0.0


def test_a_line_gives_slope_and_doubt_of_white_noise() -> None:
    """The slope's own scatter over many draws is what its u says (ordinary least squares)."""
    rng = np.random.default_rng(1)
    t: Floats = np.arange(1, 101, dtype=np.float64) * 60.0
    lines = [
        fit(t, 0.01 * t / 3600 + 0.001 * rng.standard_normal(100), t * 0 + 25.0, t * 0, 1.0)
        for _ in range(300)
    ]
    slopes = np.array([line.slope for line in lines])
    assert slopes.mean() == pytest.approx(0.01, abs=4 * slopes.std() / math.sqrt(300))
    white = 0.001 / math.sqrt(np.sum((t / 3600 - np.mean(t / 3600)) ** 2))
    assert slopes.std() == pytest.approx(white, rel=0.15)
    assert all(line.u >= 0.8 * line.rms / line.span_h for line in lines)


def test_minutes_stay_bounded_and_joined_across_segments() -> None:
    minutes = Minutes()
    for i in range(5 * MOST):
        level = 6.0 + (0.5 if i // 100 % 2 else 0.0)  # jumps between segments are taken out
        minutes.add(60.0 * (i + 1), level, 25.0, 0.08, i // 100, 0.0)
    assert len(minutes) == MOST == len(minutes.joined)
    assert minutes.moved(MOST) == pytest.approx(0.0, abs=1e-9)
    assert minutes.column(0, 1)[0] == 300.0 * MOST
    minutes.forget(60.0 * (5 * MOST - 30))
    assert len(minutes) == 30

"""The ledger: what was put into a tank, and how much it holds."""

from __future__ import annotations

import json
import math
from typing import Any

import pytest

from monitor.bench import Bench, Liquid, Probe, Tank, Valve
from monitor.blocks import Event, Second
from monitor.dosing.ledger import Dose, Ledger, Struck, Water
from monitor.logbook.codec import event_line

SALINE: dict[str, Any] = {
    "tank": "t1",
    "liquid": "saline",
    "volume_ml": 50.0,
    "volume_u_ml": 0.6,
    "open_s": 10.0,
}


def bench(mode: str = "grows", volume_ml: float | None = 1200.0) -> Bench:
    tank = {"rest_band_pct": 0.001, "mode": mode, "volume_ml": volume_ml, "volume_u_ml": 6.0}
    return Bench(
        probe={"p1": Probe(tank="t1")},
        tank={"t1": Tank.model_validate(tank)},
        liquid={"saline": Liquid(salinity_pct=0.15, salinity_u_pct=0.0005)},
        valve={
            "v1": Valve(liquid="saline", runs=((1.0, 5.0), (2.0, 10.1), (5.0, 24.9))),
            "dry": Valve(liquid="saline", runs=((1.0, 0.0),)),
            "untimed": Valve(liquid="saline"),
        },
    )


class Told:
    """A ledger, told one event a second."""

    def __init__(self, *given: Any, carried: dict[str, Any] | None = None) -> None:
        self.ledger = Ledger(bench(*given), "t1", carried)

    def __call__(self, kind: str, at: float, met: int | None = None, **fields: Any) -> Any:
        second = Second(int(at) if met is None else met)
        second.events = (Event(at, kind, fields),)
        changes = self.ledger.step(second)
        return changes[0] if changes else None


def test_a_dose_in_full() -> None:
    dose = Told()("dose", 60.942, met=61, **SALINE)
    assert isinstance(dose, Dose)
    assert (dose.time_s, dose.open_s, dose.met_k, dose.counts) == (60.942, 10.0, 61, True)
    assert dose.end_s == 60.942 + 10.0
    assert (dose.volume_ml, dose.volume_u_ml, dose.liquid_pct) == (50.0, 0.6, 0.15)
    landed, u = dose.landing(0.08, 0.0001)
    assert landed == pytest.approx((0.08 * 1200 + 0.15 * 50) / 1250, rel=1e-12)
    assert 0 < u < 2e-4


def test_a_tank_that_grows_runs_on_and_one_that_overflows_stays() -> None:
    grows, overflows = Told("grows"), Told("overflows")
    for told in (grows, overflows):
        told("dose", 10.0, **SALINE)
        told("dose", 400.0, **SALINE)
    assert grows.ledger.tank_ml == 1300.0
    assert grows.ledger.tank_u_ml == pytest.approx(math.sqrt(36 + 2 * 0.36))
    assert overflows.ledger.tank_ml == 1200.0
    assert grows.ledger.doses[1].tank_ml == 1250.0


@pytest.mark.parametrize(
    ("at", "met", "counts"),
    [(100.0, 100, True), (100.0, 998, True), (100.0, 1000, False), (40.0, 100, False)],
)
def test_a_late_dose_changes_the_volume_only(at: float, met: int, counts: bool) -> None:
    told = Told()
    told("dose", 50.0, **SALINE)
    dose = told("dose", at, met=met, **SALINE)
    assert dose.counts is counts
    assert told.ledger.tank_ml == 1300.0


def test_an_order_acts_once() -> None:
    told = Told()
    assert told("dose", 10.0, id="a", **SALINE) is not None
    assert told("dose", 10.0, met=20, id="a", **SALINE) is None
    assert told("dose", 12.0, met=21, id="b", **SALINE) is not None
    assert told.ledger.tank_ml == 1300.0


@pytest.mark.parametrize("of", ["a", "10", "10.000", 10.0])
def test_a_struck_dose_was_not_given(of: object) -> None:
    told = Told()
    told("dose", 10.0, id="a", **SALINE)
    struck = told("strike", 60.0, of=of, why="wrong tank", id="b")
    assert isinstance(struck, Struck)
    assert struck.dose.time_s == 10.0
    assert told.ledger.tank_ml == 1200.0
    assert told.ledger.tank_u_ml == pytest.approx(6.0)
    assert told("strike", 61.0, of="a") is None


def test_a_dose_earlier_than_a_struck_one_counts() -> None:
    told = Told()
    told("dose", 500.0, id="a", **SALINE)
    told("strike", 510.0, of="a")
    assert told("dose", 490.0, met=520, **SALINE).counts


def test_another_tank_is_not_ours() -> None:
    told = Told()
    assert told("dose", 10.0, **{**SALINE, "tank": "t2"}) is None
    assert told("water", 11.0, tank="t2", volume_ml=3.0) is None
    assert told.ledger.tank_ml == 1200.0


def test_a_valve_gives_the_volume() -> None:
    dose = Told()("dose", 10.0, tank="t1", valve="v1", open_s=4.0)
    assert dose.liquid == "saline"
    assert dose.volume_ml == pytest.approx(19.9, abs=0.2)
    assert dose.volume_u_ml > 0.01 * dose.volume_ml  # three runs tell little


def test_unstated_doubt_is_one_per_cent() -> None:
    dose = Told()("dose", 10.0, tank="t1", liquid="saline", volume_ml=50.0)
    assert dose.volume_u_ml == 0.5  # common practice, no source
    assert dose.open_s == 0.0


@pytest.mark.parametrize("valve", ["v9", "dry", "untimed"])
def test_a_valve_that_tells_no_volume(valve: str) -> None:
    told = Told()
    dose = told("dose", 10.0, tank="t1", valve=valve, open_s=4.0)
    assert math.isnan(dose.volume_ml)
    assert math.isnan(dose.landing(0.08, 1e-4)[0])
    assert told.ledger.tank_ml == 1200.0
    assert told("strike", 20.0, of="10.000").dose is dose
    assert told.ledger.tank_ml == 1200.0


def test_an_unknown_liquid_still_fills_the_tank() -> None:
    told = Told()
    dose = told("dose", 10.0, tank="t1", liquid="brew", volume_ml=50.0)
    assert math.isnan(dose.landing(0.08, 1e-4)[0])
    assert told.ledger.tank_ml == 1250.0


def test_water_that_is_no_dose() -> None:
    told = Told()
    water = told("water", 10.0, tank="t1", out_ml=300.0, in_ml=200.0, liquid="saline", u_ml=8.0)
    assert water == Water(10.0, 1100.0, "10.000", 10)
    assert told.ledger.tank_u_ml == pytest.approx(10.0)
    told("water", 20.0, tank="t1", volume_ml=900.0, u_ml=3.0)
    assert (told.ledger.tank_ml, told.ledger.tank_u_ml) == (900.0, 3.0)
    told("water", 30.0, tank="t1", out_ml=2000.0)
    assert told.ledger.tank_ml == 0.0
    assert math.isnan(told("dose", 40.0, **SALINE).landing(0.08, 0.0)[0])


def test_a_full_tank_runs_over() -> None:
    told = Told("overflows")
    assert told("water", 10.0, tank="t1", in_ml=500.0).tank_ml == 1200.0
    told("water", 20.0, tank="t1", out_ml=100.0)
    assert told("water", 30.0, tank="t1", in_ml=500.0).tank_ml == 1200.0


def test_what_is_carried_can_stand_in_a_log_and_goes_on() -> None:
    told = Told()
    told("dose", 10.0, id="a", **SALINE)
    told("dose", 20.0, tank="t1", liquid="brew", volume_ml=7.0)
    carried = told.ledger.carry()
    again = json.loads(event_line(30.0, "carried", carried).split(" ", 3)[3])
    later = Told(carried=again)
    assert later.ledger.carry() == carried
    assert later.ledger.tank_ml == 1257.0
    assert later("dose", 10.0, id="a", **SALINE) is None
    assert isinstance(later("strike", 40.0, of="a"), Struck)
    assert later.ledger.tank_ml == 1207.0


def test_another_volume_in_the_bench_file_begins_anew() -> None:
    told = Told()
    told("dose", 10.0, **SALINE)
    carried = told.ledger.carry()
    assert Told(carried=carried).ledger.tank_ml == 1250.0
    assert Told("grows", 1300.0, carried=carried).ledger.tank_ml == 1300.0


def test_a_tank_without_volume() -> None:
    told = Told("grows", None)
    assert math.isnan(told("dose", 10.0, **SALINE).landing(0.08, 0.0)[0])
    told("water", 20.0, tank="t1", volume_ml=900.0)
    assert Told("grows", None, carried=told.ledger.carry()).ledger.tank_ml == 900.0


def test_a_quiet_second_changes_nothing() -> None:
    ledger = Told().ledger
    before = ledger.carry()
    assert ledger.step(Second(5)) == ()
    assert ledger.carry() == before


def test_what_is_remembered_is_bounded() -> None:
    told = Told()
    for i in range(500):
        told("dose", float(i), id=f"order{i}", **SALINE)
    carried = told.ledger.carry()
    assert len(json.dumps(carried)) < 6000
    assert len(told.ledger.doses) <= 64
    assert told.ledger.tank_ml == 1200 + 500 * 50

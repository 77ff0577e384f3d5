"""Whatever is told in whatever order, and wherever the run is cut, the ledger's book balances."""

from __future__ import annotations

import json
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.bench import Bench, Liquid, Probe, Tank
from monitor.blocks import Event, Second
from monitor.dosing.ledger import Dose, Ledger, Struck

BENCH = Bench(
    probe={"p1": Probe(tank="t1")},
    tank={"t1": Tank(rest_band_pct=0.001, volume_ml=1000.0, volume_u_ml=5.0)},
    liquid={"saline": Liquid(salinity_pct=0.15)},
)
IDS = st.sampled_from([None, "a", "b", "c", "d"])
ACTS = st.lists(
    st.tuples(
        st.sampled_from(["dose", "strike", "dose"]),
        IDS,
        st.integers(1, 2000),  # TIME, however old
        st.integers(1, 64),  # mL: small whole numbers add up exactly
    ),
    max_size=30,
)


def events(acts: list[tuple[str, str | None, int, int]]) -> list[Event]:
    told = []
    for i, (kind, key, time_s, ml) in enumerate(acts):
        fields: dict[str, Any] = {"tank": "t1", "id": key}
        if kind == "dose":
            fields |= {"liquid": "saline", "volume_ml": ml}
        else:
            fields |= {"of": key or str(time_s), "id": f"s{i}"}
        told.append(Event(float(time_s), kind, fields))
    return told


def step(ledger: Ledger, k: int, *told: Event) -> tuple[Any, ...]:
    second = Second(k)
    second.events = told
    return ledger.step(second)


@given(ACTS)
def test_the_volume_is_what_was_given_and_not_struck(
    acts: list[tuple[str, str | None, int, int]],
) -> None:
    ledger, given_ml = Ledger(BENCH, "t1", None), 0.0
    for k, event in enumerate(events(acts)):
        for change in step(ledger, 2000 + k, event):
            if isinstance(change, Dose):
                given_ml += change.volume_ml
                assert change.counts == (
                    2001 + k - change.time_s <= 900
                    and all(change.time_s >= d.time_s for d in ledger.doses)
                )
            elif isinstance(change, Struck):
                given_ml -= change.dose.volume_ml
    assert ledger.tank_ml == 1000.0 + given_ml
    assert given_ml == sum(dose.volume_ml for dose in ledger.doses)


@given(ACTS, st.integers(0, 30))
def test_a_restart_anywhere_changes_nothing(
    acts: list[tuple[str, str | None, int, int]], cut: int
) -> None:
    whole, parts = Ledger(BENCH, "t1", None), Ledger(BENCH, "t1", None)
    for k, event in enumerate(events(acts[:38])):
        if k == cut and len(parts.doses) <= 8:
            parts = Ledger(BENCH, "t1", json.loads(json.dumps(parts.carry())))
        assert step(whole, 2000 + k, event) == step(parts, 2000 + k, event)
    assert whole.carry() == parts.carry()


@given(ACTS)
def test_events_of_one_second_act_in_their_order(
    acts: list[tuple[str, str | None, int, int]],
) -> None:
    one, many = Ledger(BENCH, "t1", None), Ledger(BENCH, "t1", None)
    told = events(acts)
    together = step(one, 2000, *told)
    apart = tuple(change for event in told for change in step(many, 2000, event))
    assert together == apart
    assert one.carry() == many.carry()


@given(st.floats(0.0, 0.26), st.floats(1.0, 500.0), st.floats(1.0, 500.0))
def test_two_doses_land_where_their_sum_does(before: float, first: float, second: float) -> None:
    ledger = Ledger(BENCH, "t1", None)
    fields = {"tank": "t1", "liquid": "saline"}
    (a,) = step(ledger, 10, Event(10.0, "dose", {**fields, "volume_ml": first}))
    (b,) = step(ledger, 20, Event(20.0, "dose", {**fields, "volume_ml": second}))
    (both,) = step(
        Ledger(BENCH, "t1", None), 10, Event(10.0, "dose", {**fields, "volume_ml": first + second})
    )
    one_by_one = b.landing(a.landing(before, 0.0)[0], 0.0)[0]
    assert one_by_one == pytest.approx(both.landing(before, 0.0)[0], rel=1e-12)

"""Orders: which are taken, whose logs they go to, what each refusal says."""

from __future__ import annotations

from typing import Any

import pytest

from monitor.bench import parse as parse_bench
from monitor.orders import OrderError, parse

BENCH = parse_bench(
    """
[probe.a]
tank = "t1"
[probe.b]
tank = "t1"
[probe.c]
tank = "t2"
[tank.t1]
rest_band_pct = 0.001
[tank.t2]
rest_band_pct = 0.001
[tank.dry]
rest_band_pct = 0.001
[liquid.saline]
salinity_pct = 0.15
[valve.v1]
liquid = "saline"
"""
)
DOSE = {"tank": "t1", "liquid": "saline", "volume_ml": 20.0}


def order(kind: Any, fields: Any = None, **more: Any) -> Any:
    given = DOSE if fields is None else fields
    return parse({"id": "i1", "order": kind, "fields": given, **more}, BENCH)


def test_a_dose_goes_into_the_log_of_every_probe_of_the_tank() -> None:
    made = order("dose", ago_s=2.5)
    assert made.probes == ("a", "b")
    assert made.fields == {**DOSE, "id": "i1"}
    assert made.ago_s == 2.5


def test_a_tank_may_be_named_by_its_probe() -> None:
    fields = {"liquid": "saline", "volume_ml": 1.0, "tank": None}
    assert order("water", {"out_ml": 5.0}, probe="c").probes == ("c",)
    with pytest.raises(OrderError, match="tank: missing"):
        order("dose", fields, probe="c")


def test_notes_go_to_all_or_to_one() -> None:
    assert order("note", {"text": "x"}).probes == ("a", "b", "c")
    assert order("note", {"text": "x"}, probe="b").probes == ("b",)
    assert order("out", {}, probe="b").probes == ("b",)


@pytest.mark.parametrize(
    ("kind", "fields", "more", "why"),
    [
        ("format", {}, {}, "order 'format' is not known; expected one of dose"),
        (["dose"], {}, {}, "is not known"),
        ("end", {}, {}, "is not known"),
        ("bench", {}, {}, "is not known"),
        ("carried", {}, {}, "is not known"),
        ("dose", [], {}, "fields: not an object"),
        ("dose", None, {"ago_s": "1"}, "ago_s: not a number"),
        ("dose", None, {"ago_s": True}, "ago_s: not a number"),
        ("dose", None, {"ago_s": float("nan")}, "ago_s: not a number"),
        ("dose", None, {"ago_s": -1}, "expected 0 to 86400 seconds"),
        ("dose", None, {"ago_s": 1e9}, "expected 0 to 86400 seconds"),
        ("dose", {**DOSE, "tank": "t3"}, {}, "tank 't3' has no probe; expected one of"),
        ("dose", {**DOSE, "tank": "dry"}, {}, "tank 'dry' has no probe"),
        ("dose", {**DOSE, "tank": ["t1"]}, {}, "has no probe"),
        ("dose", {**DOSE, "liquid": "milk"}, {}, "liquid 'milk' is not on the bench"),
        ("dose", {**DOSE, "volume_ml": -1}, {}, "volume_ml"),
        ("dose", {**DOSE, "volume_ml": 1e300}, {}, "volume_ml"),
        ("dose", {"tank": "t1", "valve": "v9", "open_s": 2}, {}, "valve 'v9' is not on the bench"),
        ("note", {"text": "x" * 2001}, {}, "at most 2000 characters"),
        ("note", {"text": "x"}, {"probe": "z"}, "probe 'z' is not there"),
        ("note", {"text": "x"}, {"probe": {"a": 1}}, "probe: not a name"),
        ("out", {}, {}, "probe 'None' is not there; expected one of a, b, c"),
        ("silence", {"what": "all", "until_utc": "for ever"}, {}, "until_utc"),
    ],
)
def test_what_is_wrong_is_said(kind: Any, fields: Any, more: dict[str, Any], why: str) -> None:
    with pytest.raises(OrderError) as wrong:
        order(kind, fields, **more)
    assert why in str(wrong.value)
    assert "\n" not in str(wrong.value)

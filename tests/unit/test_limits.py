"""Limits: begun, ended, quieted, marked."""

from __future__ import annotations

import json
from collections.abc import Callable
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from monitor import bench
from monitor.blocks import Second
from monitor.findings import Finding
from monitor.trust.limits import Limits

TANK = bench.Tank(rest_band_pct=0.001, aim_pct=(0.09, 0.11), fastest_pct_per_h=0.02)
AIM = bench.Tank(rest_band_pct=0.001, aim_pct=(0.09, 0.11))
FAST = bench.Tank(rest_band_pct=0.001, fastest_pct_per_h=0.02)


def watch(
    salinity: Callable[[int], float],
    n: int,
    settings: bench.Tank = AIM,
    carried: dict[str, Any] | None = None,
    u95_pct: float = 1e-4,
    **state: Callable[[int], Any],
) -> tuple[list[Finding], Limits]:
    """What n seconds of this salinity lead to; `state` gives trust's and settling's attributes."""
    limits = Limits("p1", "t1", settings, carried)
    noise = 1e-4 * np.random.default_rng(1).standard_normal(n)
    found: list[Finding] = []
    for k in range(n):
        now = {"usable": True, "out": False, "belief": "believed", "heading": 0.0}
        now.update({name: of(k) for name, of in state.items()})
        second = Second(k)
        second.salinity_pct = salinity(k) + float(noise[k])
        probe = SimpleNamespace(**now)
        found += limits.step(second, u95_pct, probe, probe)
    return found, limits


def test_beyond_the_band_is_said_once_and_ended_once() -> None:
    (said, ended), _ = watch(lambda k: 0.12 if 100 <= k < 400 else 0.10, 600)
    assert (said["which"], said["bound"], said["to_t"]) == ("high", 0.11, None)
    assert said["value"] > 0.11
    assert 100 <= said["from_t"] < said["t"] <= 120
    assert 460 <= ended["to_t"] <= 480
    assert {**ended, "t": 0, "to_t": 0} == {**said, "t": 0, "to_t": 0}


def test_below_the_band_is_low() -> None:
    (said,), _ = watch(lambda k: 0.085, 60)
    assert (said["which"], said["bound"], said["doubtful"]) == ("low", 0.09, False)


def test_from_above_to_below_ends_one_and_begins_the_other() -> None:
    found, _ = watch(lambda k: 0.12 if k < 100 else 0.08, 300)
    assert [(f["which"], f["to_t"] is None) for f in found] == [
        ("high", True),
        ("low", True),
        ("high", False),
    ]


def test_a_salinity_that_rides_on_the_bound_does_not_chatter() -> None:
    found, _ = watch(lambda k: 0.11 + 0.0003 * np.sin(k / 40), 3600)
    assert len(found) == 1


def test_a_great_doubt_does_not_hold_a_limit_for_ever() -> None:
    found, _ = watch(lambda k: 0.12 if k < 200 else 0.10, 600, u95_pct=0.02)
    assert [f["to_t"] is None for f in found] == [True, False]


def test_a_short_excursion_is_none() -> None:
    assert watch(lambda k: 0.12 if 100 <= k < 105 else 0.10, 300)[0] == []


@pytest.mark.parametrize(
    "state",
    [
        {"usable": lambda k: False, "belief": lambda k: "not-believed"},
        {"usable": lambda k: False, "out": lambda k: True},
    ],
    ids=["not believed", "out"],
)
def test_a_probe_that_cannot_be_believed_says_nothing(state: dict[str, Any]) -> None:
    assert watch(lambda k: 0.12, 900, TANK, **state)[0] == []


def test_one_in_force_lasts_through_a_time_of_disbelief() -> None:
    def bad(k: int) -> bool:
        return 200 <= k < 500

    found, _ = watch(
        lambda k: 0.10 if bad(k) else 0.12,
        900,
        usable=lambda k: not bad(k),
        belief=lambda k: "not-believed" if bad(k) else "believed",
    )
    assert len(found) == 1


def test_doubt_marks_and_does_not_silence() -> None:
    (said,), _ = watch(lambda k: 0.12, 60, belief=lambda k: "doubtful")
    assert said["doubtful"] is True


@pytest.mark.parametrize(
    ("heading", "level", "which"),
    [(1.0, 0.12, []), (-1.0, 0.12, ["high"]), (-1.0, 0.08, []), (1.0, 0.08, ["low"])],
)
def test_a_settling_dose_excuses_what_it_was_expected_to_do(
    heading: float, level: float, which: list[str]
) -> None:
    found, _ = watch(lambda k: level, 300, heading=lambda k: heading)
    assert [f["which"] for f in found] == which


def test_what_stays_beyond_once_the_dose_is_at_rest_is_said() -> None:
    (said,), _ = watch(lambda k: 0.12, 300, heading=lambda k: 1.0 if k < 200 else 0.0)
    assert 200 <= said["t"] <= 215


def test_a_fast_change_is_said_and_ended() -> None:
    """0.05 %/h for 20 min where 0.02 is allowed; the slower rest of the run is not."""
    found, _ = watch(
        lambda k: 0.10 + 0.05 / 3600 * min(max(k - 600, 0), 1200) + 0.01 / 3600 * k, 3600, FAST
    )
    said, ended = found
    assert (said["which"], said["bound"]) == ("fast", 0.02)
    assert 600 < said["t"] <= 1000
    assert said["value"] > 0.02
    assert 1800 < ended["to_t"] <= 2200


def test_a_slower_change_and_noise_are_not_fast() -> None:
    assert watch(lambda k: 0.10 + 0.015 / 3600 * k, 7200, FAST)[0] == []


@pytest.mark.parametrize(("heading", "count"), [(1.0, 0), (-1.0, 2)])
def test_a_dose_is_not_fast_unless_it_goes_the_wrong_way(heading: float, count: int) -> None:
    found, _ = watch(
        lambda k: 0.10 + 0.005 * (1 - np.exp(-max(k - 600, 0) / 20)),
        2400,
        FAST,
        heading=lambda k: heading if 600 <= k < 720 else 0.0,
    )
    assert len(found) == count


def test_without_bounds_there_is_nothing_to_do() -> None:
    assert watch(lambda k: 5.0, 600, bench.Tank(rest_band_pct=0.001))[0] == []


def test_a_restart_keeps_what_is_in_force() -> None:
    (said,), limits = watch(lambda k: 0.12, 100)
    carried = json.loads(json.dumps(limits.carry()))
    (ended,), _ = watch(lambda k: 0.10, 100, carried=carried)
    assert (ended["from_t"], ended["which"]) == (said["from_t"], "high")

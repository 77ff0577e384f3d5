"""Each quick fault: said in time, with a beginning, an end and evidence; not said of what is none.

The limits are those of the project's goals; figures of what a fault looks like are invented.
"""

from __future__ import annotations

import numpy as np
import pytest

from monitor import bench
from monitor.blocks import Floats
from monitor.trust.force import ADVICE
from tests.unit.readings import (
    LEVEL_US,
    PROBE,
    Change,
    beliefs,
    faults,
    judged,
    pulses_up,
    rows,
)
from tests.unit.streams import FLOOR_US, dose

FROM_S, TO_S = 200.0, 400.0


def between(replaced: Change) -> Change:
    """The change in [FROM_S, TO_S) only."""

    def change(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
        return np.where((t >= FROM_S) & (t < TO_S), replaced(t, p, rng), p)

    return change


def bubbles(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
    starts = np.cumsum(0.7 + rng.exponential(4.0, 200)) + FROM_S
    return pulses_up(starts.tolist())(t, p, rng)


def loose(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
    starts = np.cumsum(1.0 + rng.exponential(2.0, 200)) + FROM_S
    for i, start in enumerate(starts):
        here = (t >= start) & (t < start + 0.3)
        p = np.where(here, p * (8.0 if i % 2 else 0.4), p)
    return p


def swinging(size: float, hz: float) -> Change:
    return lambda t, p, rng: p * (1 + size * np.sin(2 * np.pi * hz * t))


MADE: dict[str, tuple[Change, float]] = {
    "bubbles": (bubbles, 60.0),
    "loose-lead": (loose, 60.0),
    "lodged-bubble": (lambda t, p, _: p * (1 + 0.2 * np.clip((t - FROM_S) / 2.5, 0, 1)), 30.0),
    "no-pulses": (lambda t, p, _: np.full(len(p), np.nan), 10.0),
    "short": (lambda t, p, rng: FLOOR_US + rng.uniform(0.0, 1.0, len(p)), 10.0),
    "stuck": (lambda t, p, _: np.full(len(p), LEVEL_US), 60.0),
    "hum": (swinging(0.012, 0.31), 120.0),
}
WORD = {"bubbles": "doubtful", "hum": "doubtful"}


@pytest.mark.parametrize("rate_hz", [2.0, 10.0])
@pytest.mark.parametrize("name", MADE)
def test_a_fault_is_said_once_and_ends(name: str, rate_hz: float) -> None:
    change, limit_s = MADE[name]
    if name in ("bubbles", "loose-lead") and rate_hz < 5.0:
        pytest.skip("jumps of half a second fall between two readings a second")
    found, trust = judged(rows(600.0, between(change), rate_hz=rate_hz))
    assert faults(found) == [(name, False), (name, True)]
    begun, ended = (f for f in found if f["finding"] == "fault")
    assert FROM_S < begun["t"] <= FROM_S + limit_s
    assert abs(begun["from_t"] - FROM_S) < 12.0
    assert abs(ended["to_t"] - TO_S) < 60.0
    assert begun["evidence"].endswith(ADVICE[name])
    assert {**begun, "t": ended["t"], "to_t": ended["to_t"]} == ended
    assert beliefs(found) == ["believed", WORD.get(name, "not-believed"), "believed"]
    assert trust.belief == "believed"
    assert not trust.faults


def test_zeros_are_no_pulses() -> None:
    found, _ = judged(rows(300.0, between(lambda t, p, _: np.zeros(len(p)))), lasts_s=300.0)
    assert faults(found) == [("no-pulses", False)]
    assert found[1]["t"] == FROM_S + 4.0
    assert "zeros" in found[1]["evidence"]


def test_a_lone_spike_or_dip_is_no_fault() -> None:
    def change(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
        p[1000], p[2000] = 5.0 * p[1000], 0.3 * p[2000]
        return p

    assert faults(judged(rows(400.0, change))[0]) == []


@pytest.mark.parametrize("hz", [0.001, 0.008])
def test_a_thermostat_is_no_hum(hz: float) -> None:
    assert faults(judged(rows(1500.0, swinging(0.01, hz)))[0]) == []


def test_ringing_that_fades_is_no_hum() -> None:
    def change(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
        rings = np.exp(-np.maximum(t - FROM_S, 0) / 25.0) * np.sin(2 * np.pi * 0.08 * t)
        return np.where(t >= FROM_S, p * (1 - 0.1 * rings), p)

    assert "hum" not in dict(faults(judged(rows(600.0, change), doses=[dose(190.0, 50.0, 0.0)])[0]))


@pytest.mark.parametrize("tau_s", [4.0, 12.0, 40.0])
@pytest.mark.parametrize("recorded", [True, False])
def test_a_dose_is_no_fault(tau_s: float, recorded: bool) -> None:
    def change(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
        arrived = 1 - np.exp(-np.maximum(t - FROM_S, 0) / tau_s)
        return p * (1 + 0.2 * arrived)

    doses = [dose(FROM_S, 200.0, 0.0)] if recorded else []
    assert faults(judged(rows(600.0, change), doses=doses)[0]) == []


def test_a_bubble_lodges_while_a_dose_mixes() -> None:
    def change(t: Floats, p: Floats, rng: np.random.Generator) -> Floats:
        arrived = 1 - np.exp(-np.maximum(t - 180.0, 0) / 20.0)
        return p * (1 - 0.15 * arrived) * np.where(t >= FROM_S + 10.0, 1.12, 1.0)

    found, _ = judged(rows(400.0, change), doses=[dose(180.0, 150.0, 0.15)])
    assert faults(found) == [("lodged-bubble", False)]
    begun = next(f for f in found if f["finding"] == "fault")
    assert begun["t"] <= FROM_S + 10.0 + 30.0


def test_an_oscillation_is_no_bubbling() -> None:
    found, _ = judged(rows(300.0, between(swinging(0.03, 0.21))))
    assert faults(found) == [("hum", False)]


def test_faults_are_said_without_standards() -> None:
    probe = bench.Probe(tank="t1", tick_us=0.01)
    for name in ("no-pulses", "stuck", "lodged-bubble"):
        found, _ = judged(rows(300.0, between(MADE[name][0])), probe=probe, lasts_s=300.0)
        assert faults(found) == [(name, False)]


@pytest.mark.parametrize("tick_us", [1.0, 2.0])
def test_a_coarse_clock_is_not_stuck(tick_us: float) -> None:
    """A level in the middle of a tick as wide as three and six sd: repeats are the rule."""
    probe = bench.Probe(tank="t1", standard=PROBE.standard, tick_us=tick_us)
    found, _ = judged(rows(1800.0, noise=0.00067, tick_us=tick_us), probe=probe)
    assert faults(found) == []

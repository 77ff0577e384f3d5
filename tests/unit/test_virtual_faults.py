"""Each fault of the virtual probe: what it does to the periods, and that it does nothing else."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from drivers.virtual_tank.faults import NAMES, Fault, make
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe, Readings
from drivers.virtual_tank.tank import Tank

FROM_S, TO_S, RATE_HZ = 100.0, 220.0, 5.0


def read(*faults: Fault) -> Readings:
    """A calm run of 400 s with these faults; the noise is the same in every run."""
    tank = Tank(0.08, 1200.0, Mixing(), np.random.default_rng(1))
    probe = Probe(
        tank,
        Climate(25.0),
        np.random.default_rng(2),
        Circuit(15.0, 900.0),
        white=0.001,
        tick_us=0.0625,
        rate_hz=RATE_HZ,
        faults=list(faults),
    )
    return probe.read(0, int(400 * RATE_HZ))


def broken(name: str, **figures: Any) -> tuple[np.ndarray[Any, Any], Readings]:
    """Ratio to the calm run inside the fault, and the whole run; outside nothing may differ."""
    fault = make(name, FROM_S, TO_S, np.random.default_rng(3), least_s=1.05 / RATE_HZ, **figures)
    calm, run = read(), read(fault)
    kept = np.isin(calm.time_s, run.time_s)
    inside = (run.time_s >= FROM_S) & (run.time_s < TO_S)
    ratio = run.period_us / calm.period_us[kept]
    assert (ratio[~inside] == 1.0).all()
    return ratio[inside], run


def test_bubbles_jump_up_only_and_return() -> None:
    ratio, _ = broken("bubbles")
    assert ratio.min() > 0.995
    up = ratio > 1.02
    assert 0.02 < up.mean() < 0.8
    assert np.count_nonzero(np.diff(up.astype(int)) == 1) >= 5


def test_lodged_bubble_stays_and_goes_at_once() -> None:
    ratio, _ = broken("lodged-bubble", height=0.2, rise_s=1.0)
    assert ratio[10:] == pytest.approx(1.2, rel=1e-3)
    assert ratio[1] < 1.1


def test_fouling_creeps_up() -> None:
    ratio, _ = broken("fouling", rate_per_h=0.3)
    quarter = ratio.size // 4
    means = [ratio[i * quarter : (i + 1) * quarter].mean() for i in range(4)]
    assert means == sorted(means)
    assert ratio[-1] == pytest.approx(1 + 0.3 * 120 / 3600, abs=1e-3)


def test_no_pulses_is_silence_or_zeros() -> None:
    ratio, _ = broken("no-pulses", style="zeros")
    assert (ratio == 0).all()
    silent, run = broken("no-pulses", style="silent")
    assert silent.size == 0
    assert np.diff(run.time_s).max() == pytest.approx(TO_S - FROM_S, abs=0.5)


def test_short_is_at_the_circuits_own_floor() -> None:
    _, run = broken("short")
    inside = run.period_us[(run.time_s >= FROM_S) & (run.time_s < TO_S)]
    assert inside.min() > 14.5
    assert inside.max() < 16.5
    assert len(np.unique(inside)) > 5  # a running circuit is never quite still


def test_stuck_says_the_very_same_figure() -> None:
    _, run = broken("stuck")
    inside = run.period_us[(run.time_s >= FROM_S) & (run.time_s < TO_S)]
    assert len(np.unique(inside)) == 1


def test_stuck_holds_its_figure_over_pieces() -> None:
    fault = make("stuck", FROM_S, TO_S, np.random.default_rng(3))
    tank = Tank(0.08, 1200.0, Mixing(), np.random.default_rng(1))
    probe = Probe(tank, Climate(), np.random.default_rng(2), faults=[fault])
    pieces = [probe.read(i, i + 7).period_us for i in range(510, 1000, 7)]
    assert len(np.unique(np.concatenate(pieces))) == 1


def test_loose_lead_jumps_far_up_and_down() -> None:
    ratio, _ = broken("loose-lead")
    assert ratio.max() > 3.9
    assert ratio.min() < 0.61
    assert np.median(ratio) == pytest.approx(1.0, abs=0.01)


def test_hum_is_one_steady_tone() -> None:
    ratio, _ = broken("hum", depth=0.02, alias_hz=0.25)
    power = np.abs(np.fft.rfft(ratio - ratio.mean()))
    assert power.argmax() * RATE_HZ / ratio.size == pytest.approx(0.25, abs=0.02)
    assert ratio.std() == pytest.approx(0.02 / np.sqrt(2), rel=0.05)


def test_lift_is_air_and_then_rinse() -> None:
    ratio, _ = broken("lift", in_air=0.5, rinse=20.0)
    half = ratio.size // 2
    assert (ratio[: half - 2] == 0).all()
    assert ratio[half + 2 :] == pytest.approx(20.0, rel=1e-3)


@pytest.mark.parametrize("name", NAMES)
def test_figures_are_drawn_where_none_are_given(name: str) -> None:
    broken(name)


def test_fault_that_is_none_is_named() -> None:
    with pytest.raises(ValueError, match="no fault 'gremlins'; one of bubbles"):
        make("gremlins", 0.0, 1.0, np.random.default_rng(1))


def test_two_faults_at_once_add_up() -> None:
    creep = make("fouling", 0.0, 400.0, np.random.default_rng(3), rate_per_h=0.5)
    lodged = make("lodged-bubble", FROM_S, TO_S, np.random.default_rng(3), height=0.2, rise_s=0.1)
    both = read(creep, lodged).period_us / read(creep).period_us
    inside = both[int(FROM_S * RATE_HZ) + 5 : int(TO_S * RATE_HZ) - 5]
    assert inside == pytest.approx(1.2, rel=1e-3)

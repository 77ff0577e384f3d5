"""The physics of the virtual tank: mass balance, mixing, the probe's noise and clock."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest

from drivers.virtual_tank import noise
from drivers.virtual_tank.bench_text import circuit_from
from drivers.virtual_tank.mixing import FOREIGN, GRID_S, KINDS, USUAL, Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank
from monitor.water import medium

CALM = Mixing("stirred", tau_s=10.0, delay_s=0.0, turbulence=0.0)


def rng(seed: int = 1) -> np.random.Generator:
    return np.random.default_rng(seed)


def probe(tank: Tank | None = None, **how: float | None) -> Probe:
    return Probe(tank or Tank(0.08, 1200.0, CALM, rng()), Climate(25.0), rng(2), **how)  # type: ignore[arg-type]


def test_salt_is_kept_whatever_is_poured() -> None:
    """Mass balance of a tank that grows: grams of salt in are grams of salt there."""
    tank = Tank(0.08, 1000.0, CALM, rng())
    tank.pour(10.0, 0.15, 100.0, 5.0)
    tank.pour(12.0, 0.0, 300.0, 30.0)
    tank.pour(900.0, 0.15, 50.0, 0.0)
    salt = 0.08 * 1000 + 0.15 * 100 + 0.15 * 50
    assert tank.volume_ml == 1450.0
    assert tank.settled_pct == pytest.approx(salt / 1450.0, rel=1e-12)


def test_overflowing_tank_is_washed_out() -> None:
    """V dS/dv = Sd - S of a well-mixed tank whose surplus runs off, in many small steps."""
    tank = Tank(0.08, 1000.0, CALM, rng(), "overflows")
    final = tank.pour(0.0, 0.0, 500.0, 10.0).final_pct
    level = 0.08
    for _ in range(100_000):
        level += (0.0 - level) * 500.0 / 1000.0 / 100_000
    assert final == pytest.approx(level, rel=1e-5)
    assert tank.volume_ml == 1000.0


def test_poured_at_once_a_stirred_tank_answers_first_order() -> None:
    """S = S1 + (S0 - S1) exp(-t/tau), the textbook answer of one stirred vessel."""
    tank = Tank(0.08, 1000.0, CALM, rng())
    pour = tank.pour(50.0, 0.15, 100.0, 0.0)
    t = np.arange(0.0, 200.0, 0.7)
    expected = np.where(
        t <= 50.0, 0.08, pour.final_pct - pour.step_pct * np.exp(-np.maximum(t - 50.0, 0) / 10.0)
    )
    assert np.max(np.abs(tank.salinity_pct(t) - expected)) < 0.006 * pour.step_pct  # the grid's


def test_pumped_in_it_lags_by_half_the_pumping_time() -> None:
    """The mean delay of a first-order answer to a ramp of O s is tau + O/2."""
    response = CALM.response(40.0, rng())
    area = float(np.sum(1.0 - response)) * GRID_S
    assert area == pytest.approx(10.0 + 20.0, abs=0.2)


def test_evaporation_and_leak_change_the_level_as_the_water_goes() -> None:
    t = np.array([0.0, 3600.0])
    dry = Tank(0.08, 1000.0, CALM, rng(), water_ml_per_h=-20.0).salinity_pct(t)
    wet = Tank(0.08, 1000.0, CALM, rng(), water_ml_per_h=20.0).salinity_pct(t)
    assert dry == pytest.approx([0.08, 0.08 / 0.98])
    assert wet == pytest.approx([0.08, 0.08 / 1.02])


def test_dose_into_a_drifting_tank_keeps_its_salt() -> None:
    tank = Tank(0.08, 1000.0, CALM, rng(), water_ml_per_h=-20.0)
    pour = tank.pour(3600.0, 0.08 / 0.98, 100.0, 5.0)  # of the very same salinity
    assert pour.step_pct == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_mixing_begins_with_all_and_ends_with_nothing(kind: str) -> None:
    mixing = Mixing(kind, tau_s=15.0, share=0.2, slow=3.5, beat=2.0)
    left = mixing.to_come(np.array([0.0, 4000.0]))
    assert left[0] == pytest.approx(1.0, abs=2e-6)
    assert abs(left[1]) < 1e-5 or kind == "power"
    response = mixing.response(20.0, rng())
    assert response[0] == pytest.approx(0.0, abs=1e-9)
    assert response[-1] == 1.0
    assert abs(response[-2] - 1.0) < 2e-3


def test_kinds_are_told_apart() -> None:
    """No two kinds answer alike, and six at least are foreign to a bench."""
    x = np.arange(0.0, 90.0, 1.0)
    shapes = [Mixing(kind, tau_s=15.0, share=0.2, slow=3.5, beat=2.0).to_come(x) for kind in KINDS]
    for i, one in enumerate(shapes):
        assert all(np.max(np.abs(one - other)) > 0.02 for other in shapes[:i])
    assert len(FOREIGN) >= 6
    assert set(USUAL) | set(FOREIGN) == set(KINDS)


def test_plume_passes_the_probe_and_loop_rings() -> None:
    x = np.arange(0.0, 200.0, 0.5)
    assert Mixing("plume", 15.0, share=0.6, slow=6.0).to_come(x).min() < -0.2
    ringing = Mixing("loop", 30.0, beat=1.0).to_come(x)
    assert np.count_nonzero(np.diff(np.sign(ringing))) >= 6


def test_turbulence_fades_as_the_tank_mixes() -> None:
    mixing = Mixing("stirred", tau_s=12.0, delay_s=0.0, turbulence=0.15)
    calm = Mixing("stirred", tau_s=12.0, delay_s=0.0, turbulence=0.0)
    runs = [
        mixing.response(30.0, rng(i))[:1000] - calm.response(30.0, rng())[:1000] for i in range(9)
    ]
    spread = np.std(runs, axis=0)
    assert spread[250:300].mean() == pytest.approx(0.15, rel=0.5)
    assert spread[700:800].mean() < 0.15 * math.exp(-(70.0 - 30.0) / 12.0) * 2


def test_later_doses_do_not_change_the_past() -> None:
    tank = Tank(0.08, 1000.0, Mixing("slow-loop", turbulence=0.1), rng())
    tank.pour(20.0, 0.15, 60.0, 10.0)
    t = np.arange(0.0, 100.0, 0.3)
    before = tank.salinity_pct(t)
    tank.pour(100.0, 0.0, 200.0, 10.0)
    assert np.array_equal(tank.salinity_pct(t), before)


def test_what_is_mixed_may_be_forgotten() -> None:
    tank = Tank(0.08, 1000.0, Mixing("loop", turbulence=0.1), rng(), water_ml_per_h=-5.0)
    for at in (0.0, 400.0, 3000.0):
        tank.pour(at, 0.15, 60.0, 10.0)
    t = np.arange(3000.0, 3400.0, 0.3)
    before = tank.salinity_pct(t)
    tank.forget(3010.0)
    assert len(tank.pours) == 1
    assert tank.salinity_pct(t) == pytest.approx(before, rel=1e-12)
    assert tank.volume_ml == 1180.0


def test_period_is_shorter_with_more_salt_and_when_warmer() -> None:
    salinity = np.linspace(0.02, 0.2, 40)
    period = Circuit().period_us(salinity, np.full(40, 25.0))
    assert (np.diff(period) < 0).all()
    assert (Circuit().period_us(salinity, np.full(40, 26.0)) < period).all()


def test_conductance_law_of_the_circuit_without_its_own_time() -> None:
    """t0 = 0, p = 1, no background: period times conductivity is the constant g."""
    salinity = np.array([0.03, 0.1])
    kappa = medium("NaCl").conductivity_25_ms(salinity)
    period = Circuit(0.0, 900.0, 1.0, 0.0).period_us(salinity, np.full(2, 25.0))
    assert period * kappa == pytest.approx([900.0, 900.0])


def test_readings_have_the_rate_the_noise_and_the_tick_they_should() -> None:
    calm = probe(white=0.002, flicker=0.0, tick_us=0.5, rate_hz=10.0, thermometer_c=0.03)
    read = calm.read(0, 20_000)
    assert len(read.time_s) == 20_000
    assert (np.diff(read.time_s) > 0).all()
    assert np.diff(read.time_s).mean() == pytest.approx(0.1, rel=1e-4)
    assert np.allclose(np.mod(read.period_us, 0.5), 0.0)
    assert np.std(np.log(read.period_us)) == pytest.approx(0.002, rel=0.03)
    assert np.std(read.temp_c) == pytest.approx(0.03, rel=0.05)


def test_probe_without_thermometer_says_no_temperature() -> None:
    assert np.isnan(probe(thermometer_c=None).read(0, 50).temp_c).all()


def test_flicker_has_equal_power_in_every_octave() -> None:
    """1/f noise has a flat Allan deviation: W. J. Riley, NIST SP 1065 (2008), from memory."""
    wave = noise.pink(rng())
    assert wave.std() == pytest.approx(1.0)

    def allan(m: int) -> float:
        means = wave[: wave.size // m * m].reshape(-1, m).mean(axis=1)
        return float(np.sqrt(np.mean(np.diff(means) ** 2) / 2))

    assert allan(256) / allan(8) == pytest.approx(1.0, abs=0.25)


def test_noise_free_water_does_not_depend_on_how_it_is_read() -> None:
    tank = Tank(0.08, 1200.0, Mixing("loop", turbulence=0.1), rng())
    tank.pour(5.0, 0.15, 60.0, 10.0)
    still = {"white": 0.0, "flicker": 0.0005, "tick_us": 0.0625, "rate_hz": 5.0}
    whole = probe(tank, **still)
    parts = probe(tank, **still)
    pieces = [parts.read(0, 1), parts.read(1, 40), parts.read(40, 300)]
    assert (
        np.abs(np.concatenate([p.period_us for p in pieces]) - whole.read(0, 300).period_us).max()
        < 1.0
    )  # jitter of the readings' times is drawn anew, the water is the same


def test_twelve_hours_take_about_a_second() -> None:
    tank = Tank(0.08, 1200.0, Mixing("dead-zone"), rng())
    for i in range(6):
        tank.pour(1000.0 + 7000.0 * i, 0.15, 40.0, 10.0)
    night = probe(tank, rate_hz=5.0)
    began = time.perf_counter()
    night.read(0, 12 * 3600 * 5)
    assert time.perf_counter() - began < 3.0


def test_circuit_that_reads_the_standards_is_found_again() -> None:
    truth = Circuit(14.0, 820.0, 0.97)
    pct = np.array([0.03, 0.06, 0.09, 0.12, 0.15])
    temp = np.array([24.0, 25.0, 26.0, 25.0, 24.5])
    period = truth.period_us(pct, temp)
    found = circuit_from(list(zip(pct.tolist(), period.tolist(), temp.tolist())))
    assert found.period_us(pct, temp) == pytest.approx(period, rel=2e-3)

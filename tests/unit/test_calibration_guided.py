"""The guided run: rest is waited for, bubbles are refused, odd standards questioned at once."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.calibration.guided import GuidedRun
from monitor.water import medium

LEVELS = [0.025, 0.05, 0.075, 0.1, 0.125, 0.15]
RATE_HZ = 5


class Bench:
    """A probe that is put from one standard into another; the reading follows within seconds."""

    def __init__(self, seed: int = 3) -> None:
        self.rng = np.random.default_rng(seed)
        self.t = 1000.0
        self.run = GuidedRun("NaCl", 0.5, LEVELS)
        self.ln = math.log(700.0)

    def ideal_us(self, salinity_pct: float, temp_c: float) -> float:
        law = medium("NaCl")
        k = float(law.conductivity_25_ms(np.array([salinity_pct]))[0]) + 0.0015
        return float(12.0 + 700.0 * (k * law.sensitivity(temp_c)[0]) ** -0.98)

    def read(
        self, salinity_pct: float, seconds: float, lift: float = 0.0, tau_s: float = 8.0
    ) -> None:
        target = math.log(self.ideal_us(salinity_pct, 24.0))
        for _ in range(int(seconds * RATE_HZ)):
            self.ln += (target - self.ln) * (1 - math.exp(-1 / (RATE_HZ * tau_s)))
            noise = 0.0015 * self.rng.standard_normal()
            period = round(2 * math.exp(self.ln + lift + noise)) / 2
            self.run.feed(self.t, period, 24.0)
            self.t += 1 / RATE_HZ

    def take(self, salinity_pct: float, really_pct: float | None = None) -> None:
        self.run.put_in(salinity_pct)
        for _ in range(40):
            self.read(salinity_pct if really_pct is None else really_pct, 5)
            if self.run.phase in ("ask", "question"):
                return
        pytest.fail(f"never taken: {self.run.say()}")


def test_six_standards_in_any_order_give_a_calibration() -> None:
    bench = Bench()
    assert "into which standard first? 0.025, 0.05" in bench.run.say()
    for salinity in (0.1, 0.025, 0.15, 0.05, 0.075, 0.125):
        bench.take(salinity)
        assert bench.run.phase == "ask"
    assert bench.run.to_come() == []
    assert "done?" in bench.run.say()
    for standard in bench.run.taken:
        ideal = bench.ideal_us(standard["salinity_pct"], 24.0)
        assert standard["period_us"] == pytest.approx(ideal, rel=1.5e-3)
        assert standard["readings"] >= 120
        assert standard["sd_us"] == pytest.approx(0.0015 * ideal, rel=0.4)
        assert standard["temp_c"] == 24.0


def test_it_waits_for_rest() -> None:
    bench = Bench()
    bench.run.put_in(0.1)
    bench.read(0.1, 15)
    assert bench.run.phase == "settle"
    assert "coming to rest" in bench.run.say()
    bench.read(0.1, 80)
    assert bench.run.phase == "ask"


def test_a_bubble_is_refused() -> None:
    bench = Bench()
    bench.run.put_in(0.1)
    while bench.run.phase != "read":
        bench.read(0.1, 1)
    bench.read(0.1, 3, lift=0.02)
    assert bench.run.phase == "settle"
    assert "a bubble" in bench.run.say()
    bench.read(0.1, 90)
    assert bench.run.taken[0]["period_us"] == pytest.approx(bench.ideal_us(0.1, 24.0), rel=1e-3)


def test_a_probe_without_pulses_is_said() -> None:
    bench = Bench()
    bench.run.put_in(0.1)
    for i in range(20):
        bench.run.feed(bench.t + i / RATE_HZ, 0.0, None)
    assert "no pulse" in bench.run.say()
    bench.t += 20
    bench.read(0.1, 3)
    bench.t += 30.0
    bench.read(0.1, 2)
    assert "no pulse" in bench.run.say()


def test_a_standard_out_of_order_is_questioned_at_once() -> None:
    bench = Bench()
    bench.take(0.1)
    bench.take(0.05, really_pct=0.15)
    assert bench.run.phase == "question"
    assert "more salt must read shorter" in bench.run.say()
    bench.run.drop()
    assert [s["salinity_pct"] for s in bench.run.taken] == [0.1]
    assert "0.05 % dropped" in bench.run.say()


def test_one_that_does_not_fit_the_others_is_questioned_and_may_be_kept() -> None:
    bench = Bench()
    for salinity in (0.025, 0.05, 0.125, 0.15):
        bench.take(salinity)
        assert bench.run.phase == "ask"
    bench.take(0.1, really_pct=0.09)
    assert bench.run.phase == "question"
    assert "by the others" in bench.run.say()
    bench.run.keep()
    assert bench.run.phase == "ask"
    assert len(bench.run.taken) == 5


def test_it_is_left_and_taken_up_again() -> None:
    bench = Bench()
    bench.take(0.1)
    bench.run.put_in(0.05)
    again = GuidedRun("NaCl", 0.5, LEVELS, taken=bench.run.taken)
    assert again.taken == bench.run.taken
    assert again.to_come() == [0.025, 0.05, 0.075, 0.125, 0.15]
    again.drop()
    assert again.taken == []


def test_a_repeat_is_welcome() -> None:
    bench = Bench()
    bench.take(0.1)
    bench.take(0.1)
    assert len(bench.run.taken) == 2


def test_a_salinity_that_is_none_is_refused() -> None:
    with pytest.raises(ValueError):
        GuidedRun("NaCl", 0.5).put_in(-1.0)

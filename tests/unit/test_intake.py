"""Minutes: what is taken up, and what stops it."""

from __future__ import annotations

import math
from types import SimpleNamespace
from typing import Any

import pytest

from monitor import bench
from monitor.blocks import NAN, Event, Second
from monitor.dosing.ledger import Change, Struck, Water
from monitor.trust.intake import SETTLE_S, Intake
from tests.unit.streams import STANDARDS, dose

PROBE = bench.Probe(tank="t1", standard=STANDARDS)


class Feed:
    """Seconds given one by one to an Intake."""

    def __init__(self) -> None:
        self.intake = Intake(PROBE)
        self.level: Any = SimpleNamespace(
            locked=True, in_gate_ln=6.5, m=6.5, noise=0.002, tick_us=0.5, rate_hz=2.0
        )
        self.k = 0

    def give(
        self, seconds: int, ln_us: float = 6.5, *changes: Change, event: str = "", **level: Any
    ) -> int:
        """That many seconds, changes and event in the first; the minutes they closed."""
        closed = 0
        for i in range(seconds):
            second = Second(self.k)
            second.salinity_pct, second.temp_used_c = 0.08, 25.0
            if event and not i:
                second.events = (Event(float(self.k), event, {}),)
            vars(self.level).update({"in_gate_ln": ln_us, "m": ln_us, **level})
            closed += self.intake.step(second, self.level, () if i else changes)
            self.k += 1
        return closed


def test_a_minute_is_the_mean_of_its_seconds_without_strays() -> None:
    feed = Feed()
    for i in range(60):
        feed.give(1, 6.9 if i % 20 == 7 else 6.5 + 0.001 * (i % 3 - 1))
    (level,) = feed.intake.minutes.column(1, 1)
    assert level == pytest.approx(math.log(math.exp(6.5) - feed.intake.floor_us), abs=1e-4)


def test_a_minute_needs_twenty_sure_seconds() -> None:
    feed = Feed()
    assert feed.give(41, locked=False) + feed.give(19, locked=True) == 0
    assert feed.give(39, locked=False) + feed.give(21, locked=True) == 1


def test_a_slow_reader_needs_its_share() -> None:
    feed = Feed()
    closed = sum(feed.give(1, 6.5 if k % 10 == 0 else NAN, rate_hz=0.1) for k in range(120))
    assert closed == 2


@pytest.mark.parametrize("change", [dose(600.0, 50.0, 0.15), Water(600.0, 900.0, "w", 600)])
def test_a_dose_and_water_pause_it_and_begin_a_segment(change: Change) -> None:
    feed = Feed()
    assert feed.give(600) == 10
    paused = SETTLE_S + 60
    assert feed.give(paused - 60, 6.4, change) == 0
    feed.give(600, 6.4)
    segments = feed.intake.minutes.column(4, len(feed.intake.minutes))
    assert (segments[0], segments[-1]) == (0, 1)
    assert feed.intake.minutes.moved(len(feed.intake.minutes)) == pytest.approx(0.0, abs=1e-9)


def test_a_strike_pauses_nothing() -> None:
    feed = Feed()
    feed.give(60)
    assert feed.give(120, 6.5, Struck(dose(10.0, 50.0, 0.15), 60)) == 2


def test_a_level_found_elsewhere_is_a_jump_and_pauses() -> None:
    feed = Feed()
    feed.give(120)
    feed.give(30, 6.5, locked=False)
    feed.give(1, 6.55, locked=True)
    jump = feed.intake.jump
    assert jump is not None
    assert jump.lost_t == 121.0
    assert jump.step == pytest.approx(0.05, rel=0.05)
    assert feed.give(SETTLE_S - 60, 6.55) == 0


def test_a_level_found_where_it_was_goes_on() -> None:
    feed = Feed()
    feed.give(120)
    feed.give(30, locked=False)
    assert feed.give(90, 6.505, locked=True) == 2
    assert feed.intake.minutes.one_segment(4)


def test_out_of_the_tank_nothing_is_taken() -> None:
    feed = Feed()
    feed.give(60)
    assert feed.give(120, 6.0, event="out", m=6.5) == 0
    assert feed.give(60, event="back") == 1
    assert feed.intake.minutes.one_segment(2)


def test_the_pause_is_carried() -> None:
    feed, again = Feed(), Feed()
    assert feed.intake.carry() == {}
    feed.give(1, 6.5, dose(0.0, 50.0, 0.15))
    again.intake.resume(feed.intake.carry())
    assert again.give(SETTLE_S) == 0
    assert again.give(120) == 2

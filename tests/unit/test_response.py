"""The answer to a dose: a film, fresh water, neither, or unknown."""

from __future__ import annotations

import math

import pytest

from monitor.blocks import NAN
from monitor.trust.intake import POWER
from monitor.trust.response import Asked, favours_fouling
from tests.unit.streams import dose

GIVEN = dose(7200.0, 250.0, 0.15)
READ, COST, SLOPE = 0.08, 0.03, 0.02
ASKED = Asked(GIVEN, READ, COST, SLOPE, 0.0005, 7200.0)
AFTER_T = 8400.0


def seen_through_a_film() -> float:
    """Mass balance on the true salinity, read too low by the film's cost then."""
    true = READ * math.exp(COST / POWER)
    later = COST + SLOPE * (AFTER_T - 7200.0) / 3600.0
    return GIVEN.landing(true, 0.0)[0] * math.exp(-later / POWER)


def seen_clean() -> float:
    """Mass balance on what is read, the water thinning further."""
    return GIVEN.landing(READ, 0.0)[0] * math.exp(-SLOPE * (AFTER_T - 7200.0) / 3600.0 / POWER)


def test_each_cause_is_favoured_by_its_own_answer() -> None:
    assert favours_fouling(ASKED, seen_through_a_film(), AFTER_T) > 1.0
    assert favours_fouling(ASKED, seen_clean(), AFTER_T) < -0.5


def test_a_dose_that_fits_neither_says_nothing() -> None:
    assert math.isnan(favours_fouling(ASKED, READ, AFTER_T))


@pytest.mark.parametrize("unknown", ["tank_ml", "liquid_pct"])
def test_a_dose_of_unknown_volume_or_liquid_says_nothing(unknown: str) -> None:
    vague = Asked(
        dose(7200.0, 250.0, NAN) if unknown == "liquid_pct" else dose(7200.0, 250.0, 0.15, NAN),
        READ,
        COST,
        SLOPE,
        0.0005,
        7200.0,
    )
    assert math.isnan(favours_fouling(vague, seen_clean(), AFTER_T))


def test_a_small_film_is_not_decided_by_one_dose() -> None:
    slight = Asked(GIVEN, READ, 0.004, 0.0, 0.0005, 7200.0)
    assert abs(favours_fouling(slight, GIVEN.landing(READ, 0.0)[0], AFTER_T)) < 1.0


def test_without_a_thermometer_an_answer_tells_less() -> None:
    blind = Asked(GIVEN, READ, COST, SLOPE, 0.0005, 7200.0, 0.02)
    seen = favours_fouling(ASKED, seen_through_a_film(), AFTER_T)
    assert 0.0 < favours_fouling(blind, seen_through_a_film(), AFTER_T) < 0.5 * seen

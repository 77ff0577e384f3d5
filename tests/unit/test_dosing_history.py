"""What several doses tell together, drawn from tanks and probes whose truth is known."""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import UTC, datetime

import numpy as np
import pytest
import scipy.stats

from monitor.dosing.history import Answer, _chi2_99, in_words, lesson
from monitor.dosing.ledger import Dose
from monitor.findings import Finding
from monitor.report.digest import sections
from monitor.report.night import Lane, Night

READ_U = 5e-5


def night(
    seed: int,
    volumes: list[float],
    really_ml: float = 1200.0,
    answers_by: float = 1.0,
    liquid_off: float = 0.0,
) -> list[Answer]:
    """Doses into a tank that is said to hold 1200 mL, as a probe of some response reads them."""
    rng = np.random.default_rng(seed)
    level, told_ml, true_ml, answers = 0.03, 1200.0, really_ml, []
    for i, ml in enumerate(volumes):
        told = Dose(
            time_s=1000.0 * i,
            open_s=5.0,
            volume_ml=ml,
            volume_u_ml=0.005 * ml,
            liquid="saline",
            liquid_pct=0.15,
            liquid_u_pct=0.0005,
            tank_ml=told_ml,
            tank_u_ml=6.0,
            mode="grows",
            key=str(i),
            met_k=0,
            counts=True,
        )
        given = replace(
            told,
            tank_ml=true_ml,
            volume_ml=ml * (1 + 0.005 * rng.standard_normal()),
            liquid_pct=0.15 + liquid_off,
        )
        landed = given.landing(level, 0.0)[0]
        after = level + answers_by * (landed - level) + READ_U * rng.standard_normal()
        answers.append(Answer(told, level, after, READ_U))
        level, told_ml, true_ml = landed, told_ml + ml, true_ml + given.volume_ml
    return answers


def test_a_tank_of_another_volume() -> None:
    found = lesson(night(1, [20.0, 300.0, 50.0, 400.0, 30.0, 60.0], really_ml=1500.0))
    assert found is not None
    assert found.likely == "tank volume"
    assert found.told_ml == 1200 + 800
    assert found.tank_ml.value == pytest.approx(1500 + 800, abs=3 * found.tank_ml.u)
    assert found.tank_ml.u < 40
    assert "mL instead of 2000 mL" in in_words(found)


def test_a_probe_that_answers_weakly() -> None:
    found = lesson(night(2, [20.0, 300.0, 50.0, 400.0, 30.0, 60.0], answers_by=0.8))
    assert found is not None
    assert found.likely == "response"
    assert found.response.value == pytest.approx(0.8, abs=3 * found.response.u)
    assert "another tank volume does not fit" in in_words(found)


def test_equal_small_doses_cannot_tell() -> None:
    found = lesson(night(3, [30.0, 30.0, 30.0, 30.0], answers_by=0.8))
    assert found is not None
    assert found.likely == "either"
    assert "cannot tell which" in in_words(found)


def test_doses_that_have_nothing_in_common() -> None:
    answers = night(4, [30.0, 30.0, 30.0, 30.0, 30.0])
    odd = [
        replace(a, after_pct=a.before_pct + share * (a.after_pct - a.before_pct))
        for a, share in zip(answers, (0.3, 1.0, 0.5, 1.0, 0.4))
    ]
    found = lesson(odd)
    assert found is not None
    assert found.likely == "neither"


def test_what_is_as_recorded_is_seldom_doubted() -> None:
    rng = np.random.default_rng(5)
    doubted, inside = 0, 0
    for seed in range(300):
        volumes = [float(ml) for ml in rng.uniform(20, 80, 5)]
        off = 0.0005 * rng.standard_normal()
        held = 1200 + 6.0 * rng.standard_normal()
        found = lesson(night(1000 + seed, volumes, really_ml=held, liquid_off=off))
        assert found is not None
        doubted += found.likely != "as recorded"
        inside += abs(found.tank_ml.value - held - sum(volumes[:-1])) <= 2 * found.tank_ml.u
    assert doubted <= 0.09 * 300
    assert 0.91 <= inside / 300 <= 0.99


def test_more_doses_do_not_undo_a_wrong_liquid() -> None:
    few, many = lesson(night(6, [40.0] * 4)), lesson(night(6, [40.0] * 40))
    assert few is not None
    assert many is not None
    shared = 0.0005 / 0.12  # of the step, by the liquid alone, at the first dose
    assert many.response.u > 0.8 * shared


def test_too_few_or_unknown_doses_tell_nothing() -> None:
    answers = night(7, [30.0, 30.0, 30.0])
    assert lesson(answers[:2]) is None
    unknown = replace(answers[2], dose=replace(answers[2].dose, liquid_pct=math.nan))
    assert lesson([*answers[:2], unknown]) is None


@pytest.mark.parametrize("dof", [2, 5, 20])
def test_quantile_of_chi_squared(dof: int) -> None:
    assert _chi2_99(dof) == pytest.approx(scipy.stats.chi2.ppf(0.99, dof), rel=0.01)


def test_the_morning_report_says_it() -> None:
    answers = night(1, [20.0, 300.0, 50.0, 400.0, 30.0, 60.0], really_ml=1500.0)
    lane = Lane("p1", "t1", doses={a.dose.time_s: a.dose for a in answers})
    rests: list[Finding] = [
        {
            "finding": "rest",
            "probe": "p1",
            "tank": "t1",
            "t": a.dose.time_s + 60.0,
            "to_t": None,
            "dose_t": a.dose.time_s,
            "salinity_pct": a.after_pct,
            "before_pct": a.before_pct,
            "step_u95_pct": 2 * a.u_pct,
        }
        for a in answers
    ]
    rests.append({"finding": "rest", "probe": "p1", "t": 9e3, "to_t": None, "dose_t": None})
    told = sections(Night(datetime(2026, 3, 14, tzinfo=UTC), 0.0, 9e3, [lane], rests))
    (doses,) = (section.lines for section in told if section.title == "Doses")
    found = lesson(answers)
    assert found is not None
    assert doses == [f"t1: {in_words(found)}"]

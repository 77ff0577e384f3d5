"""Arrays drawn as text: what stands in which cell, what stays empty."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.blocks import Floats
from monitor.screen.draw import Canvas, Columns, nice_bounds, nice_step, strip

SCALE = (0.0, 10.0)
AIM = (3.0, 7.0)


def columns(t: list[float], y: list[float], n: int = 16, gap_s: float = 2.6) -> Columns:
    return Columns(np.array(t), np.array(y), 0.0, 1.0, n, gap_s)


def test_a_curve_is_drawn_from_dot_to_dot() -> None:
    canvas = Canvas(4, 1, 0.0, 4.0)
    canvas.curve(columns([0, 1, 2, 3, 4, 5, 6, 7], [0.5, 0.5, 1.5, 1.5, 2.5, 2.5, 3.5, 3.5], 8), 1)
    assert canvas.text() == "⣀⠤⠒⠉"


def test_a_step_is_joined_by_an_upright() -> None:
    canvas = Canvas(2, 1, 0.0, 4.0)
    canvas.curve(columns([0, 1, 2, 3], [0.5, 0.5, 3.5, 3.5], 4), 1)
    assert canvas.text() == "⣀⠏"


def test_a_true_gap_stays_one() -> None:
    t = [0.0, 1.0, 2.0, 9.0, 10.0, 11.0]
    canvas = Canvas(6, 1, 0.0, 4.0)
    canvas.curve(columns(t, [0.5] * 6, 12), 1)
    assert canvas.text() == "⣀⡀  ⢀⣀"


def test_slow_readings_are_joined_and_a_missing_one_is_not() -> None:
    t = [0.0, 4.0, 8.0, 16.0, 20.0]
    held = columns(t, [1.0] * 5, 24, gap_s=5.0)
    seen = np.isfinite(held.low)
    assert seen[:9].all()
    assert not seen[9:16].any()
    assert seen[16:21].all()


def test_dense_readings_keep_their_extremes() -> None:
    t = np.linspace(0.0, 4.0, 401)[:-1]
    y = np.zeros(400)
    y[123] = 7.0
    held = Columns(t, y, 0.0, 1.0, 4, 2.6)
    assert held.high.tolist() == [0.0, 7.0, 0.0, 0.0]
    assert held.low.tolist() == [0.0] * 4


@pytest.mark.parametrize("y", [[np.nan] * 4, [np.inf, -np.inf, np.nan, np.nan], []])
def test_nothing_is_drawn_of_what_is_no_number(y: list[float]) -> None:
    canvas = Canvas(4, 2, 0.0, 1.0)
    canvas.curve(columns([0.0, 1.0, 2.0, 3.0][: len(y)], y, 8), 1)
    canvas.points(np.arange(float(len(y))), np.array(y), 0.0, 1.0, 1)
    assert canvas.text().strip() == ""


def test_what_is_off_the_scale_is_not_drawn_at_its_edge() -> None:
    canvas = Canvas(2, 1, 0.0, 1.0)
    canvas.curve(columns([0, 1, 2, 3], [9.0, 9.0, -9.0, -9.0], 4), 1)
    text = canvas.text()
    assert text[0] == " "  # above; the fall through the scale is an upright line
    assert text[1] in "⡇⢸"


def test_the_later_ink_wins_a_cell_and_a_curve_has_it_alone() -> None:
    canvas = Canvas(1, 1, 0.0, 4.0)
    canvas.points(np.array([0.0, 1.0]), np.array([3.5, 3.5]), 0.0, 1.0, 1)
    canvas.curve(columns([0, 1], [0.5, 0.5], 2), 2)
    assert canvas.text() == "⣀"
    assert canvas.ink[0, 0] == 2


def test_a_band_is_shaded_between_its_bounds() -> None:
    canvas = Canvas(3, 4, 0.0, 4.0)
    canvas.band(1.0, 3.0, 1, 1, "┄")
    assert canvas.paper[:, 0].tolist() == [0, 1, 1, 0]
    assert "┄┄┄" in canvas.text()


@pytest.mark.parametrize(
    ("value", "u95", "drawn"),
    [
        (5.0, 0.6, "      ├·╺━◆╸··┤     "),
        (6.6, 0.9, "      ├····╺━◆┿╸    "),
        (5.0, 4.0, "  ━━━━┿━━━◆━━━┿━━━╸ "),
        (0.4, 0.1, "◆╸    ├·······┤     "),
        (-3.0, 0.1, "◀     ├·······┤     "),
        (99.0, 0.1, "      ├·······┤    ▶"),
    ],
    ids=["inside", "inside, barely", "cannot say", "outside", "off the left", "off the right"],
)
def test_the_doubt_is_drawn_on_the_aim(value: float, u95: float, drawn: str) -> None:
    assert strip(20, SCALE, AIM, value, u95) == drawn


def test_three_answers_have_three_shapes() -> None:
    surely, barely, cannot = (strip(20, SCALE, AIM, *v) for v in ((5, 0.6), (6.4, 0.9), (5, 4)))
    assert (surely.count("┿"), barely.count("┿"), cannot.count("┿")) == (0, 1, 2)


def test_without_a_value_only_the_aim_is_drawn() -> None:
    assert set(strip(20, SCALE, AIM, np.nan, np.nan)) == set(" ├┤·")
    assert "◇" in strip(20, SCALE, AIM, 5.0, np.nan, hollow=True)


@given(
    st.floats(allow_nan=True, allow_infinity=True),
    st.floats(allow_nan=True, allow_infinity=True),
    st.integers(1, 60),
)
def test_a_strip_has_its_width_whatever_it_is_given(value: float, u95: float, width: int) -> None:
    assert len(strip(width, SCALE, AIM, value, abs(u95), value)) == width


@given(st.floats(-1e6, 1e6), st.floats(0, 1e6), st.floats(1e-9, 1e3))
def test_bounds_hold_what_is_seen(low: float, span: float, least: float) -> None:
    bottom, top = nice_bounds(low, low + span, least)
    assert bottom <= low
    assert top >= low + span
    assert top - bottom >= least * (1 - 1e-9) or top - bottom >= 1e-12


@pytest.mark.parametrize(("span", "step"), [(1.0, 0.2), (0.9, 0.2), (0.004, 0.001), (37.0, 10.0)])
def test_steps_are_round(span: float, step: float) -> None:
    assert nice_step(span, 5) == pytest.approx(step)


def test_runs_join_to_the_row() -> None:
    rng = np.random.default_rng(2)
    canvas = Canvas(40, 5, 0.0, 1.0)
    y: Floats = rng.random(200)
    canvas.points(np.linspace(0, 40, 200), y, 0.0, 0.5, 1)
    canvas.put(2, 35, "cut off here", 3)
    names, papers = ("", "faint", "trace", "expect"), ("", "/aim")
    rows = ["".join(text for text, _ in canvas.runs(i, names, papers)) for i in range(5)]
    assert "\n".join(rows) == canvas.text()
    assert rows[2].endswith("cut o")


def test_minutes_and_seconds_meet_without_a_hole() -> None:
    minutes = Columns(np.array([0.0, 1, 2, 3]), np.full(4, 0.5), 0.0, 1.0, 8, 2.0)
    seconds = Columns(np.array([4.0, 5, 6, 7]), np.full(4, 3.5), 0.0, 1.0, 8, 2.0)
    seconds.fill_from(minutes)
    canvas = Canvas(4, 1, 0.0, 4.0)
    canvas.curve(seconds, 1)
    assert canvas.text() == "⣀⣀⠏⠉"

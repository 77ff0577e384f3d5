"""The fast lane on stretches longer than a template, and where they break off."""

from __future__ import annotations

import random

import numpy as np
import pytest

from monitor.logbook import lanes

LINES = 2 * lanes._TILE // 20  # no template covers them


def strict(text: bytes, temperature: bool) -> list[tuple[float, float, float] | None]:
    """By the definition, a line at a time."""
    lines = text.split(b"\n")[:-1]
    most = 2 if temperature else 1
    return [lanes.slow(line) if line.count(b",") <= most else None for line in lines]


def assert_same(text: bytes, temperature: bool = True) -> lanes.Rows:
    """The fast lane gives the strict one's figures, to the bit; they are returned."""
    rows, expected = lanes.fast(text, temperature), strict(text, temperature)
    assert rows.good.tolist() == [row is not None for row in expected]
    figures = np.array([row for row in expected if row is not None]).reshape(-1, 3)
    assert np.stack(rows[1:]).T[rows.good].tobytes() == figures.tobytes()
    return rows


def stretch(first_ms: int, lines: int, period: bytes = b"585.5", temp: bytes = b",24.98") -> bytes:
    """Lines 10 ms apart."""
    times = range(first_ms, first_ms + 10 * lines, 10)
    return b"".join(b"%d.%03d,%s%s\n" % (t // 1000, t % 1000, period, temp) for t in times)


@pytest.mark.parametrize("first_ms", [0, 9_000, 99_500, 999_990])
def test_time_grows_by_a_digit(first_ms: int) -> None:
    assert assert_same(stretch(first_ms, LINES)).good.all()


@pytest.mark.parametrize("temp", [b"", b",", b",-0.01", b",-0.00", b",7", b",100.123456"])
@pytest.mark.parametrize("temperature", [True, False])
def test_shapes_of_the_temperature(temp: bytes, temperature: bool) -> None:
    assert_same(stretch(500_000, 3000, temp=temp), temperature)


@pytest.mark.parametrize("period", [b"0", b"254", b"123456789012.123", b"123456789012.1234"])
def test_figures_up_to_what_is_exact_and_beyond(period: bytes) -> None:
    assert assert_same(stretch(500_000, 3000, period)).good.all()


@pytest.mark.parametrize("at", [0, 1, 11, 12, 1023, 1024, 1025, 5000, LINES - 1])
@pytest.mark.parametrize("spoilt", [b"\0", b"x", b"500.0,585.5", b"nan,1,2", b"500.0,58:.5,24.98"])
def test_one_spoilt_line_costs_itself_only(at: int, spoilt: bytes) -> None:
    lines = stretch(500_000, LINES).split(b"\n")
    lines[at] = spoilt
    assert_same(b"\n".join(lines))


def test_shapes_that_alternate_and_mix() -> None:
    rng = random.Random(3)
    periods = [b"998.5", b"1002.0", b"9", b"0", b"1002.25"]
    temps = [b",9.99", b",10.01", b",", b"", b",-1.5"]
    for of in ([0, 1], [0, 1, 2, 3, 4]):
        lines = [
            b"%d.%03d,%s%s\n"
            % (t // 1000, t % 1000, periods[rng.choice(of)], temps[rng.choice(of)])
            for t in range(0, 200_000, 17)
        ]
        assert assert_same(b"".join(lines)).good.all()


def test_every_digit_in_every_place() -> None:
    rng = random.Random(5)
    lines = [
        b"%05d.%03d,%03d.%01d,%02d.%02d\n" % tuple(rng.randrange(10**n) for n in (5, 3, 3, 1, 2, 2))
        for _ in range(LINES)
    ]
    assert assert_same(b"".join(lines)).good.all()


def test_a_line_longer_than_what_is_taken_at_a_time() -> None:
    long = b"1.0," + b"5" * (2 * lanes._MIXED)
    assert_same(stretch(0, 20) + long + b"\n" + stretch(500_000, 2000))

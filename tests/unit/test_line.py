"""The wire's lines: each case whole, growing byte by byte, and with garbage behind it."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Literal

import pytest

from drivers.line import BOOT_S, LINE_MAX, Decoder, Reading, escaped


@dataclass(frozen=True)
class Wire:
    period_unit: Literal["us", "ms", "s", "counts"] = "us"
    tick_hz: float | None = None


def read(data: bytes, wire: Wire = Wire()) -> tuple[list[Reading], dict[str, int]]:
    """What a line gives whole, grown and trailed by garbage: the same, or the test fails."""
    whole = Decoder(wire)
    readings = whole.feed(data, 100.0)
    grown = Decoder(wire)
    pieces = [reading for i in range(len(data)) for reading in grown.feed(data[i : i + 1], 100.0)]
    assert pieces == readings
    assert grown.counts == whole.counts
    assert grown.take_rejected() == whole.take_rejected()
    trailed = Decoder(wire)
    assert trailed.feed(data + b"\xff{{\0", 100.0) == readings
    assert trailed.counts == whole.counts  # no line's end yet: nothing is judged
    assert trailed.feed(b"\n", 100.0) == []
    assert trailed.counts.total() == whole.counts.total() + 1
    return readings, dict(whole.counts)


@pytest.mark.parametrize(
    ("line", "period", "temp"),
    [
        (b"254\n", "254", ""),
        (b"254.0,24.81\n", "254.0", "24.81"),
        (b"16256;24.8\r\n", "16256", "24.8"),
        (b"254 24\n", "254", "24"),
        (b"254\t24\n", "254", "24"),
        (b"  254 , -4.5 \r\n", "254", "-4.5"),
        (b"254,\n", "254", ""),
        (b"254 ;\t\n", "254", ""),
        (b"0\n", "0", ""),
        (b"999999999999.123456789\n", "999999999999.123456789", ""),
        (b"000254.50,005.0\n", "000254.50", "005.0"),
        (b"1,2 *1D\n", None, None),
        (b"255,20*1C\n", "255", "20"),
        (b"255,20*1c\r\n", "255", "20"),
        (b" " * 61 + b"254\n", "254", ""),
        (b" " * 61 + b"254\r\n", "254", ""),
    ],
)
def test_line_of_the_grammar(line: bytes, period: str | None, temp: str | None) -> None:
    readings, counts = read(line)
    if period is None:
        assert (readings, counts) == ([], {"check wrong": 1})
    else:
        assert (readings, counts) == ([Reading(period, str(temp))], {})


@pytest.mark.parametrize(
    ("line", "why"),
    [
        (b"\n", "empty"),
        (b"\r\n", "empty"),
        (b"nan\n", "not a reading"),
        (b"1_000\n", "not a reading"),
        (b"-5\n", "not a reading"),
        (b"+5\n", "not a reading"),
        (b".5\n", "not a reading"),
        (b"5.\n", "not a reading"),
        (b"1e3\n", "not a reading"),
        (b"1234567890123\n", "not a reading"),
        (b"0.1234567890\n", "not a reading"),
        (b"254,24,\n", "not a reading"),
        (b"254,,24\n", "not a reading"),
        (b"254,nan\n", "not a reading"),
        (b"254,1234\n", "not a reading"),
        (b"254\0\n", "not a reading"),
        (b"254\x1b[2J\n", "not a reading"),
        (b"254\r\r\n", "not a reading"),
        (b"25\r4\n", "not a reading"),
        ("２５４\n".encode(), "not ASCII"),
        ("254\n".encode("utf-16"), "not ASCII"),
        (b"254*5\n", "not a reading"),
        (b"254*00\n", "check wrong"),
        (b" " * 62 + b"254\n", "too long"),
        (b" " * 62 + b"254\r\n", "too long"),
        (b"9" * 5000 + b"\n", "too long"),
    ],
)
def test_no_reading_is_counted_by_its_reason(line: bytes, why: str) -> None:
    readings, counts = read(line)
    assert readings == []
    if line.startswith(b"\xff\xfe"):  # little-endian: its last NUL stands behind the line's end
        assert sum(counts.values()) == 1
    else:
        assert counts == {why: 1}


def test_check_is_the_exclusive_or_of_all_before_the_star() -> None:
    """As NMEA 0183 has it; worked out here by hand: '2' ^ '5' ^ '4' = 0x32^0x35^0x34 = 0x33."""
    assert read(b"254*33\n")[0] == [Reading("254", "")]
    assert read(b" 254*13\n")[0] == [Reading("254", "")]  # a blank is 0x20 more


@pytest.mark.parametrize(("temp", "said"), [("85", "error"), ("-127", "error"), ("61", "outside")])
def test_temperature_that_is_none_is_said_once(temp: str, said: str) -> None:
    decoder = Decoder(Wire())
    assert decoder.feed(f"254,{temp}\n254,{temp}.0\n".encode(), 9.0) == [Reading("254", "")] * 2
    (note,) = decoder.take_notes()
    assert said in note
    decoder.feed(b"254,-6\n", 9.0)
    assert decoder.take_notes() == []
    assert decoder.counts.total() == 0


@pytest.mark.parametrize(("temp", "kept"), [("-5", "-5"), ("60.0", "60.0"), ("60.01", "")])
def test_temperature_at_its_bounds(temp: str, kept: str) -> None:
    assert Decoder(Wire()).feed(f"254,{temp}\n".encode(), 9.0) == [Reading("254", kept)]


@pytest.mark.parametrize(
    ("wire", "sent", "us"),
    [
        (Wire("ms"), "0.254", "254"),
        (Wire("ms"), "0.25400", "254.00"),
        (Wire("ms"), "0.123456789", "123.456789"),
        (Wire("s"), "0.000254125", "254.125"),
        (Wire("s"), "1", "1000000"),
        (Wire("counts", 16e6), "16256", "1016"),
        (Wire("counts", 16e6), "4063", "253.9375"),
        (Wire("counts", 3e6), "1", "0.333333333"),
        (Wire("counts", 3e6), "2", "0.666666667"),
        (Wire("counts", 72e6), "0", "0"),
        (Wire("counts", 32768.0), "1", "30.517578125"),
    ],
)
def test_period_in_another_unit(wire: Wire, sent: str, us: str) -> None:
    assert read(sent.encode() + b",20\n", wire)[0] == [Reading(us, "20")]


def test_period_that_no_log_could_hold_is_no_reading() -> None:
    assert read(b"1234567.5\n", Wire("s"))[1] == {"period beyond any": 1}


def test_boot_text_just_after_opening_is_no_fault() -> None:
    decoder = Decoder(Wire())
    decoder.opened(50.0)
    assert decoder.feed(b"ets Jun  8 2016\r\nrst:0x1\r\n254\n", 50.0 + BOOT_S - 0.1) == [
        Reading("254", "")
    ]
    assert (decoder.boot_lines, decoder.take_rejected()) == (2, None)
    decoder.feed(b"rst:0x1\r\n", 50.0 + BOOT_S)
    assert decoder.take_rejected() == {"n": 1, "why": "not a reading 1", "sample": "rst:0x1\\x0d"}
    assert decoder.take_rejected() is None


def test_half_a_line_does_not_go_on_after_the_port_was_opened_again() -> None:
    decoder = Decoder(Wire())
    decoder.feed(b"25", 9.0)
    decoder.opened(60.0)
    assert decoder.feed(b"4\n", 60.0) == [Reading("4", "")]
    decoder.feed(b"9" * 100, 61.0)
    decoder.opened(70.0)
    assert decoder.feed(b"254\n", 70.0) == [Reading("254", "")]


def test_endless_line_keeps_no_more_than_a_line() -> None:
    decoder = Decoder(Wire())
    for _ in range(1000):
        assert decoder.feed(b"x" * 1000, 9.0) == []
    assert len(decoder._tail) <= LINE_MAX + 2
    assert decoder.counts == {"too long": 1}
    assert decoder.feed(b"\n254\n", 9.0) == [Reading("254", "")]


def test_sample_is_printable_and_short() -> None:
    assert escaped("\x1b[2J\\\x80" + "\0" * 90) == "\\x1b[2J\\x5c\\x80" + "\\x00" * 6
    assert len(escaped("a" * 39 + "\x1b")) == 39


def test_hostile_blanks_cost_no_more_than_a_line_is_long() -> None:
    """Runs of blanks that could be parted in many ways must not be tried in all of them."""
    line = b"1" + b" " * 62 + b"x\n"
    decoder = Decoder(Wire())
    began = time.perf_counter()
    decoder.feed(line * 2000, 9.0)
    assert time.perf_counter() - began < 0.5  # 0.005 s when tried once; 1 s and more if not
    assert decoder.counts == {"not a reading": 2000}

"""One test a rule of the log: what is a row, what is dropped and as what it is counted."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.blocks import Block, Event
from monitor.logbook.codec import LINE_MOST, HeaderError, NoLogError
from monitor.logbook.parser import BareParser, Item, Parser

HEAD = "# stillbrine log 1\n# probe: p1\n# started: 2026-03-14T18:00:00.000Z\n"
THREE = HEAD + "time_s,period_us,temp_c\n"


def parsed(text: str | bytes) -> tuple[Parser, list[Item]]:
    parser = Parser()
    items = parser.feed(text.encode() if isinstance(text, str) else text)
    return parser, items + parser.finish()


def rows(text: str | bytes) -> list[list[float | None]]:
    blocks = [item for item in parsed(text)[1] if isinstance(item, Block)]
    table = np.concatenate([np.stack(block).T for block in blocks] or [np.empty((0, 3))])
    return [[None if np.isnan(x) else x for x in row] for row in table.tolist()]


def test_rows_and_events_in_the_order_of_the_file() -> None:
    _, items = parsed(THREE + '1,2,3\n#! 0.5 note {"text": "a"}\n2,2,3\n')
    assert [type(item) for item in items] == [Block, Event, Block]


def test_columns_of_a_block_are_read_only() -> None:
    (block,) = parsed(THREE + "1,2,3\n" * 100)[1]
    assert isinstance(block, Block)
    with pytest.raises(ValueError, match="read-only"):
        block.period_us[0] = 0.0


def test_temperature_left_out_or_empty() -> None:
    assert rows(THREE + "1,2,3\n1,2,\n1,2\n") == [[1, 2, 3], [1, 2, None], [1, 2, None]]


def test_columns_by_name() -> None:
    text = HEAD + "ph,temp_c,period_us,time_s\n7,24.5,585,1\n,,585,2\nx,24.5,585\n"
    assert rows(text) == [[1, 585, 24.5], [2, 585, None]]
    assert parsed(text)[0].dropped == {"number of columns": 1}


@pytest.mark.parametrize("n", [1, 100])
def test_two_columns_hold_no_third(n: int) -> None:
    text = HEAD + "time_s,period_us\n" + "1,2\n" * n + "1,2,3\n"
    assert rows(text) == [[1, 2, None]] * n
    assert parsed(text)[0].dropped == {"number of columns": 1}


@pytest.mark.parametrize("columns", ["time_s,temp_c", "time_s,period_us,period_us", ""])
def test_columns_refused(columns: str) -> None:
    with pytest.raises(HeaderError, match="expected"):
        parsed(HEAD + columns + "\n")


def test_event_before_the_columns_is_met_there() -> None:
    text = HEAD + '#! 0.5 note {"text": "a"}\ntime_s,period_us\n1,2\n'
    assert [type(item) for item in parsed(text)[1]] == [Event, Block]


@pytest.mark.parametrize("n", [0, 100])
@pytest.mark.parametrize(
    ("line", "why"),
    [
        (b"0.5,2,3", "time goes back"),
        (b"1,2,3,4", "number of columns"),
        (b"1", "number of columns"),
        (b"", "number of columns"),
        (b"1,nan,3", "no number"),
        (b"1,2,3\r", "no number"),
        (b"1,2\0,3", "NUL in line"),
        (b"-1,2,3", "no number"),
        (b"1," + b"2" * LINE_MOST, "line over 1 MB"),
        (b"#! 1 note {}", "malformed event"),
        (b'#! 1 note {"text": "\xff"}', "malformed event"),
        (b"# " + b"2" * LINE_MOST, "line over 1 MB"),
    ],
)
def test_dropped_and_counted(line: bytes, why: str, n: int) -> None:
    good = b"1,2,3\n" * n
    text = THREE.encode() + b"1,2,3\n" + good + line + b"\n" + good + b"1,2,3\n"
    assert rows(text) == [[1, 2, 3]] * (2 * n + 2)
    whole = parsed(text)[0]
    assert whole.dropped == {why: 1}
    pieces = Parser()
    for at in range(0, len(text), 300_000):
        pieces.feed(text[at : at + 300_000])
    pieces.finish()
    assert (pieces.dropped, pieces.lines) == (whole.dropped, whole.lines)


def test_equal_times_are_ordinary_and_one_back_is_measured_from_the_newest() -> None:
    text = THREE + "5,1\n5,2\n4,3\n4.5,4\n5,5\n"
    assert rows(text) == [[5, 1, None], [5, 2, None], [5, 5, None]]
    assert parsed(text)[0].dropped == {"time goes back": 2}


def test_an_event_of_old_time_moves_no_row() -> None:
    assert len(rows(THREE + '5,1\n#! 900.0 note {"text": "a"}\n5,2\n')) == 2


def test_a_last_line_without_lf_is_torn_at_every_length() -> None:
    last = "61.305,584.5,24.98"
    for size in range(1, len(last) + 1):
        text = THREE + "1,2,3\n" + last[:size]
        assert rows(text) == [[1, 2, 3]]
        assert parsed(text)[0].dropped == {"torn": 1}
    assert not parsed(THREE + last + "\n")[0].dropped


def test_what_is_no_log_is_refused_at_once() -> None:
    for text in ("254\n", "\n", "x" * (LINE_MOST + 1), '#! 1 note {"text": "a"}\n'):
        with pytest.raises(NoLogError, match="expected"):
            Parser().feed(text.encode())
    with pytest.raises(HeaderError, match="version 9"):
        Parser().feed(b"# stillbrine log 9\n")
    with pytest.raises(HeaderError, match="column"):
        Parser().feed(HEAD.encode() + b"# a\n" * 500)


def test_memory_is_bounded_by_a_line_without_end() -> None:
    parser = Parser()
    parser.feed(THREE.encode())
    for _ in range(50):
        parser.feed(b"1" * 300_000)
        assert len(parser._tail) <= LINE_MOST
    (block,) = parser.feed(b"\n7,8,9\n")
    assert isinstance(block, Block)
    assert block.time_s.tolist() == [7.0]
    assert parser.dropped == {"line over 1 MB": 1}


def test_bare_capture() -> None:
    parser = BareParser(10.0)
    items = (
        parser.feed(b"254\r\n16256;24.8\n5,hello\n25") + parser.feed(b"5.5\n1") + parser.finish()
    )
    table = np.concatenate([np.stack(item).T for item in items if isinstance(item, Block)])
    assert table[:, :2].tolist() == [[0.0, 254.0], [0.1, 16256.0], [0.2, 255.5]]
    assert parser.dropped == {"no number": 1, "torn": 1}

"""Headers, names and events: what is accepted, what is refused and in which words."""

from __future__ import annotations

from datetime import UTC, datetime

import pytest

from monitor.logbook import codec
from monitor.logbook.codec import EventError, Header, HeaderError

STARTED = datetime(2026, 3, 14, 18, tzinfo=UTC)


def test_header_comes_back() -> None:
    for header in (Header("p1", STARTED, "6f1c", 12), Header("p1", STARTED)):
        *lines, columns = header.text().splitlines()
        assert codec.header_of(lines) == header
        assert columns == codec.COLUMNS


def test_unknown_keys_are_passed_over_and_run_and_part_optional() -> None:
    lines = [codec.FIRST_LINE, "# mood: fine", "# started: 2026-03-14T18:00:00Z", "# probe: p1"]
    assert codec.header_of(lines) == Header("p1", STARTED, None, 1)


@pytest.mark.parametrize(
    ("lines", "said"),
    [
        ([], "first line"),
        (["# stillbrine log 2"], "version 2"),
        (["# stillbrine log 1"], "probe"),
        (["# stillbrine log 1", "# probe: ../x"], "probe"),
        (["# stillbrine log 1", "# probe: p", "# started: now"], "started"),
        (["# stillbrine log 1", "# probe: p", "# started: 2026-13-14T18:00:00Z"], "started"),
        (["# stillbrine log 1", "# probe: p", "# part: 0"], "part"),
    ],
)
def test_header_refused(lines: list[str], said: str) -> None:
    with pytest.raises(HeaderError, match=f"{said}.*expected"):
        codec.header_of(lines)


def test_names_of_files() -> None:
    name = codec.file_name(Header("p-1", STARTED, "6f1c", 7))
    assert name == "p-1-20260314T180000Z-007.log"
    assert codec.parse_name(name) == ("p-1", "20260314T180000Z", 7, False)
    assert codec.parse_name(name + ".gz") == ("p-1", "20260314T180000Z", 7, True)
    for other in (name + ".gz.tmp", "../" + name, "p1.log", name + "\n"):
        assert codec.parse_name(other) is None


@pytest.mark.parametrize(
    "line",
    [
        "#! 1.0 note {",
        '#! 1.0 note {"text": "a"} x',
        '#! 1.0 note {"text": "a", "text": "b"}',
        "#! 1.0 note []",
        "#! 1.0 note {}",
        '#!1.0 note {"text": "a"}',
        '#! nan note {"text": "a"}',
        '#! 1.0000000 note {"text": "a"}',
        '#! 1.0 carried {"a": NaN}',
        '#! 1.0 carried {"a": [1e999]}',
        '#! 1.0 carried {"a": ' + "9" * 400 + "}",
        '#! 1.0 carried {"a": ' + "9" * 9000 + "}",
        '#! 1.0 carried {"a": ' + "[" * 100_000 + "}",
        '#! 1.0 carried {"a": "\0"}',
        '#! 1.0 dose {"tank": "t1"}',
        '#! 1.0 dose {"tank": "t1", "liquid": "s", "volume_ml": -1}',
        '#! 1.0 dose {"tank": "t1", "liquid": "s", "volume_ml": "5"}',
        '#! 1.0 dose {"tank": "t1", "liquid": "s", "volume_ml": true}',
        '#! 1.0 dose {"tank": "t 1", "liquid": "s", "volume_ml": 5}',
        '#! 1.0 dose {"tank": "t1", "valve": "s"}',
        '#! 1.0 water {"tank": "t1"}',
        '#! 1.0 gap {"link": "maybe"}',
        '#! 1.0 rejected {"n": 1.5}',
        '#! 1.0 alive {"utc": "noon"}',
        '#! 1.0 note {"text": "a", "id": 5}',
    ],
)
def test_malformed_event(line: str) -> None:
    with pytest.raises(EventError):
        codec.event_of(line)


def test_unknown_kind_is_kept() -> None:
    assert codec.event_of('#! -2.5 later {"a": [1]}') == (-2.5, "later", {"a": [1]})


@pytest.mark.parametrize(
    ("time_s", "kind", "fields"),
    [
        (1.0, "note", {"text": "x" * 3000}),
        (1.0, "carried", {"a": float("nan")}),
        (1.0, "carried", {"a": object()}),
        (1.0, "carried", {"a": "x" * 1_000_001}),
        (1e9, "note", {"text": "a"}),
        (float("nan"), "note", {"text": "a"}),
        (1.0, "No Kind", {}),
    ],
)
def test_what_could_not_be_read_back_is_not_written(
    time_s: float, kind: str, fields: dict[str, object]
) -> None:
    with pytest.raises(EventError):
        codec.event_line(time_s, kind, fields)

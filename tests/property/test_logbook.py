"""A log cut anywhere reads the same; the fast lane is the strict one to the bit; decode(encode)."""

from __future__ import annotations

import itertools
import json
import random
from collections import Counter
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.blocks import Block, Event
from monitor.logbook import codec, lanes
from monitor.logbook.parser import Parser

HEAD = b"# stillbrine log 1\n# probe: p1\n# started: 2026-03-14T18:00:00.000Z\n"
COLUMNS = (
    b"time_s,period_us,temp_c\n",
    b"time_s,period_us\n",
    b"temp_c,x,period_us,time_s\n",
)


def read(pieces: list[bytes]) -> tuple[list[Any], Counter[str], int]:
    """Rows (as bits) and events in order, what was dropped, lines."""
    parser = Parser()
    said: list[Any] = []
    for item in [i for piece in pieces for i in parser.feed(piece)] + parser.finish():
        if isinstance(item, Block):
            said += [column.tobytes() for column in np.stack(item).T]
        else:
            said.append(item)
    return said, parser.dropped, parser.lines


def row(rng: random.Random, t: int) -> bytes:
    period = rng.choice([b"585.5", b"254", b"0", b"16256.25", b"123456789012.123456789", b"9.5"])
    temp = rng.choice([b",24.98", b",24.98", b",-1.5", b",", b"", b",7", b",100.123456"])
    return b"%d.%03d,%s%s\n" % (t // 1000, t % 1000, period, temp)


def spoilt(rng: random.Random, line: bytes) -> bytes:
    at = rng.randrange(len(line))
    odd = rng.choice([b"\0", b"\r", b" ", b'"', b",", b"-", b".", b"e", b"+", b"\n", b"_", b"\xff"])
    return rng.choice(
        [
            line[:at] + odd + line[at:],
            line[:at] + odd + line[at + 1 :],
            line[:at] + b"\n",
            line[at:] or b"\n",
            b"nan,1,2\n",
            b"1,inf\n",
            b"1e2,5\n",
            b"1,2,3,4\n",
            b"1234567890,5,5\n",
            b"1,1234567890123\n",
            b"1,5,1234\n",
            b"1,5.1234567890\n",
            b"1.1234567,5\n",
            b"#! 1.0 note {\n",
            b'#! 1.0 note {"text": "a"}\n',
            b"# by the way\n",
            b"\n",
            "１,5\n".encode(),
        ]
    )


def text(seed: int, lines: int, share: float, same: bool) -> bytes:
    rng, t, out = random.Random(seed), 0, []
    for _ in range(lines):
        t += rng.choice([0, 1, 10, 200])
        line = b"%d.%03d,585.5,24.98\n" % (t // 1000, t % 1000) if same else row(rng, t)
        out.append(spoilt(rng, line) if rng.random() < share else line)
    return b"".join(out)


@pytest.mark.parametrize("share", [0.0, 0.01, 0.2, 0.9])
@pytest.mark.parametrize("same", [True, False])
def test_fast_lane_is_the_strict_one(share: float, same: bool) -> None:
    for seed in range(40):
        whole = text(seed, 300, share, same)
        lines = whole.split(b"\n")[:-1]
        rows = lanes.fast(whole)
        strict = [lanes.slow(line) for line in lines]
        assert rows.good.tolist() == [found is not None for found in strict]
        figures = np.array([found for found in strict if found is not None]).reshape(-1, 3)
        assert np.stack(rows[1:]).T[rows.good].tobytes() == figures.tobytes()


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 10**6),
    st.sampled_from([0.0, 0.03, 0.5]),
    st.booleans(),
    st.sampled_from(COLUMNS),
    st.data(),
)
def test_cut_anywhere_the_same(
    seed: int, share: float, same: bool, columns: bytes, data: st.DataObject
) -> None:
    whole = HEAD + columns + text(seed, 150, share, same)
    whole = whole[: len(whole) - data.draw(st.integers(0, 30))]
    cuts = sorted(data.draw(st.lists(st.integers(0, len(whole)), max_size=12)))
    pieces = [whole[a:b] for a, b in itertools.pairwise([0, *cuts, len(whole)])]
    at_once = read([whole])
    assert read(pieces) == at_once
    every = [whole[i : i + 7] for i in range(0, len(whole), 7)]  # all by the slow lane
    assert read(every) == at_once


@given(
    st.decimals(0, 999_999_999, places=3),
    st.decimals(0, 999_999_999_999, places=9),
    st.none() | st.decimals(-5, 60, places=4),
)
def test_row_comes_back(time_s: Any, period_us: Any, temp_c: Any) -> None:
    figures = [f"{time_s:f}", f"{period_us:f}", "" if temp_c is None else f"{temp_c:f}"]
    line = codec.row_line(*figures).replace("-0.0000", "0.0000")
    found = lanes.slow(line.encode().rstrip(b"\n"))
    assert found is not None
    assert found[:2] == (float(figures[0]), float(figures[1]))
    assert np.isnan(found[2]) if temp_c is None else found[2] == float(figures[2])


names = st.from_regex(r"[A-Za-z0-9][A-Za-z0-9_-]{0,31}", fullmatch=True)
amounts = st.floats(1e-3, 1e9)
OF_CHECK: dict[Any, st.SearchStrategy[Any]] = {
    codec._number: st.floats(-1e12, 1e12) | st.integers(-(10**12), 10**12),
    codec._amount: amounts,
    codec._text: st.text(max_size=60),
    codec._name: names,
    codec._utc: st.just("2026-03-14T18:00:00.125Z"),
    codec._count: st.integers(0, 10**9),
    codec._of: st.text(max_size=20) | st.floats(-1e9, 1e9),
    codec._link: st.sampled_from(["lost", "back"]),
}


def fields_of(kind: str) -> st.SearchStrategy[dict[str, Any]]:
    checks = codec.KINDS[kind].items()
    needed = {key: OF_CHECK[check] for key, check in checks if not key.endswith("?")}
    more = {key[:-1]: OF_CHECK[check] for key, check in checks if key.endswith("?")}
    if kind == "dose":
        needed |= {"liquid": names, "volume_ml": amounts}
    if kind == "water":
        needed |= {"out_ml": amounts}
    more["of_its_own"] = st.recursive(
        st.none() | st.booleans() | st.floats(allow_nan=False, allow_infinity=False) | st.text(),
        lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
        max_leaves=5,
    )
    optional = {key: strategy for key, strategy in more.items() if key not in needed}
    return st.fixed_dictionaries(needed, optional=optional)


@pytest.mark.parametrize("kind", [*codec.KINDS, "not-known-yet"])
def test_event_comes_back(kind: str) -> None:
    known = fields_of(kind) if kind in codec.KINDS else st.dictionaries(st.text(), st.text())

    @settings(max_examples=30, deadline=None)
    @given(st.integers(-(10**9), 10**11), known)
    def comes_back(ms: int, fields: dict[str, Any]) -> None:
        line = codec.event_line(ms / 1000, kind, fields)
        assert line.isascii()
        assert line.count("\n") == 1
        found = codec.event_of(line.rstrip("\n"))
        assert found == Event(ms / 1000, kind, fields)

    comes_back()


@given(st.binary(max_size=300))
def test_nothing_after_the_head_stops_it(noise: bytes) -> None:
    said, _, _ = read([HEAD + COLUMNS[0] + noise + b"\n1.5,254\n"])
    assert all(isinstance(item, bytes | Event) for item in said)


@given(st.dictionaries(st.text(), st.floats() | st.text()))
def test_whatever_is_written_reads_back_or_is_refused(fields: dict[str, Any]) -> None:
    try:
        line = codec.event_line(1.0, "carried", fields)
    except codec.EventError:
        assert any(isinstance(v, float) and not np.isfinite(v) for v in fields.values())
        return
    assert json.loads(line.split(" ", 3)[3]) == codec.event_of(line.rstrip("\n")).fields

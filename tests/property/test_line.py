"""Streams of good lines and noise, cut anywhere, give the same readings and the same counts."""

from __future__ import annotations

import itertools
import re
from types import SimpleNamespace

from hypothesis import given
from hypothesis import strategies as st

from drivers.line import LINE_MAX, Decoder, Reading

# The grammar as it is published, word for word (digits in ASCII).
PUBLISHED = re.compile(
    r"[ \t]*\d{1,12}(\.\d{1,9})?([ \t]*[,;\t ][ \t]*(-?\d{1,3}(\.\d{1,6})?)?)?[ \t]*"
    r"(\*[0-9A-Fa-f]{2})?",
    re.ASCII,
)
WIRE = SimpleNamespace(period_unit="us", tick_hz=None)

good = st.builds(
    lambda period, temp, end: f"{period / 16},{temp / 100:.2f}".encode() + end,
    st.integers(1, 10**7),
    st.integers(-400, 5900),
    st.sampled_from([b"\n", b"\r\n"]),
)
junk = st.one_of(
    st.binary(max_size=200),
    st.text("0123456789.,;\t *-aF\r\n", max_size=80).map(str.encode),
)


def decoded(pieces: list[bytes]) -> tuple[list[Reading], object, object]:
    decoder = Decoder(WIRE)
    readings = [reading for piece in pieces for reading in decoder.feed(piece, 9.0)]
    return readings, decoder.counts, decoder.take_rejected()


@given(st.lists(st.one_of(good, junk), max_size=30), st.data())
def test_cut_anywhere_the_same(parts: list[bytes], data: st.DataObject) -> None:
    stream = b"".join(parts)
    cuts = sorted(data.draw(st.lists(st.integers(0, len(stream)), max_size=20)))
    edges = [0, *cuts, len(stream)]
    pieces = [stream[a:b] for a, b in itertools.pairwise(edges)]
    assert decoded(pieces) == decoded([stream])


@given(st.lists(good, min_size=1, max_size=30), st.lists(junk, min_size=31, max_size=31))
def test_no_good_line_is_lost_in_noise(lines: list[bytes], noise: list[bytes]) -> None:
    stream = [b"".join([bad.replace(b"*", b""), b"\n", line]) for bad, line in zip(noise, lines)]
    readings, _, _ = decoded(stream)
    sent = [Reading(*line.decode().strip().split(",")) for line in lines]
    left = iter(readings)
    assert all(reading in left for reading in sent)  # all of them, in their order


@given(st.text("05.,; \t*-aF", max_size=20))
def test_grammar_is_the_published_one(line: str) -> None:
    decoder = Decoder(WIRE)
    n = len(decoder.feed(line.encode() + b"\n", 9.0))
    is_line = PUBLISHED.fullmatch(line) is not None and len(line) <= LINE_MAX
    assert n + decoder.counts["check wrong"] == is_line

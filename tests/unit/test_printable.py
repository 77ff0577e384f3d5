"""Text from outside can do nothing to a terminal, an HTML page or a spreadsheet."""

from __future__ import annotations

import unicodedata

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.printable import cell, printable

DOORS = {
    "clear screen": ("\x1b[2J", "\\x1b[2J"),
    "title": ("\x1b]0;x\x07", "\\x1b]0;x\\x07"),
    "C1 CSI": ("\x9b31m", "\\x9b31m"),
    "newline": ("a\nb\r", "a\\x0ab\\x0d"),
    "right to left": ("\u202eabc", "\\u202eabc"),
    "zero width": ("a\u200bb\ufeff", "a\\u200bb\\ufeff"),
    "separators": ("a\u2028b", "a\\u2028b"),
    "lone surrogate": ("\ud800", "\\ud800"),
    "private": ("\U000f0000", "\\U000f0000"),
    "emoji stays": ("tank 🐟", "tank 🐟"),
}


@pytest.mark.parametrize(("text", "shown"), DOORS.values(), ids=list(DOORS))
def test_what_could_act_is_shown_as_an_escape(text: str, shown: str) -> None:
    assert printable(text) == shown


@given(st.text(max_size=400), st.integers(4, 300))
def test_nothing_unprintable_and_never_longer(text: str, most: int) -> None:
    shown = printable(text, most)
    assert len(shown) <= most
    assert all(unicodedata.category(c) not in ("Cc", "Cf", "Cs", "Co", "Cn") for c in shown)


def test_a_long_name_is_cut_visibly() -> None:
    assert printable("x" * 300, 10) == "xxxxxxx..."


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@x"])
def test_a_cell_is_no_formula(text: str) -> None:
    assert cell(text).lstrip('"').startswith("'")


def test_a_cell_with_commas_and_quotes_is_quoted() -> None:
    assert cell('a,"b"') == '"a,""b"""'

"""Where the recording itself has stopped, no screen says that all is quiet."""

from __future__ import annotations

from datetime import UTC, datetime

import pytest

from monitor.screen import sheet
from monitor.screen.figures import Clock
from monitor.screen.look import Look
from monitor.screen.plain import PlainText
from tests.screen import fixed

TROUBLE = "NOTHING IS RECORDED for 40 s: does `stillbrine run` still run?"
CLOCK = Clock(datetime(2026, 3, 14, 18, 0, tzinfo=UTC))


def stopped() -> fixed.FixedSource:
    """Three tanks whose service is gone."""
    source = fixed.mixing()
    source.trouble = TROUBLE
    return source


@pytest.mark.parametrize("size", [(40, 12), (80, 24), (200, 60)])
def test_it_stands_where_quiet_would_stand(size: tuple[int, int]) -> None:
    drawn = sheet.draw(stopped(), Look(), *size, CLOCK).rows[0]
    head = "".join(text for text, _ in drawn)
    assert head.startswith(" NOTHING IS RECORDED")
    assert {ink for text, ink in drawn if "NOTHING" in text} == {"alarm"}


def test_plain_text_says_it_with_the_minute() -> None:
    assert TROUBLE in PlainText(stopped()).lines()[-1]


def test_it_cannot_act_on_the_terminal() -> None:
    source = stopped()
    source.trouble = "NOT RECORDED: p1: /x\x1b[2J"
    head = "".join(text for text, _ in sheet.draw(source, Look(), 80, 24, CLOCK).rows[0])
    assert "\x1b" not in head
    assert "\\x1b[2J" in head

"""The screen as text: a line when something becomes another, one a minute over all."""

from __future__ import annotations

from pathlib import Path

import pytest

from monitor.blocks import Event
from monitor.screen import plain
from monitor.screen.plain import PlainText
from monitor.screen.replayed import ReplaySource
from tests.screen import invented

DOSE = Event(120.0, "dose", {"tank": "t1", "liquid": "saline", "volume_ml": 120.0, "id": "d1"})
LANDS_PCT = (0.08 * 1200 + 0.15 * 120) / 1320


def read(source: ReplaySource, step_s: float = 1.0) -> list[str]:
    """All that is printed while the source is played."""
    text, lines = PlainText(source), []
    t = 0.0
    while t <= source.end_s:
        source.seek(t)
        source.advance()
        lines += text.lines()
        t += step_s
    return lines


@pytest.fixture
def dosed(tmp_path: Path) -> ReplaySource:
    text = invented.log_text(
        invented.bench(label="north"), salinity=invented.dosed(123.0, LANDS_PCT), events=[DOSE]
    )
    return ReplaySource([invented.saved(tmp_path, text)])


def test_it_says_where_a_dose_leads_and_that_it_is_at_rest(dosed: ReplaySource) -> None:
    lines = read(dosed)
    of_tank = [line for line in lines if "north:" in line]
    assert any("still moving, lands at 0.08" in line for line in of_tank)
    assert "at rest" in of_tank[-1]
    assert 3 <= len(of_tank) <= 10  # not a line a second


def test_a_minute_has_one_line_over_all(dosed: ReplaySource) -> None:
    lines = [line for line in read(dosed) if "north:" not in line]
    assert len(lines) == 6  # one to begin with, five minutes
    assert all(line.split("  ")[1] in ("quiet", "1 moving, nothing wrong") for line in lines[2:])


def test_hostile_names_reach_the_terminal_escaped(tmp_path: Path) -> None:
    label = "a\\u001b[2Jb" + "x" * 150
    text = invented.log_text(invented.bench(label=label), length_s=60.0)
    source = ReplaySource([invented.saved(tmp_path, text)])
    lines = read(source, 20.0)
    assert any("a\\x1b[2Jb" in line for line in lines)
    assert all(line.isprintable() for line in lines)
    assert all(len(line) < 200 for line in lines)


def test_a_replay_ends_by_itself(tmp_path: Path) -> None:
    text = invented.log_text(invented.bench(), length_s=60.0)
    source = ReplaySource([invented.saved(tmp_path, text)], speed=3600.0)
    printed: list[str] = []
    plain.run(source, printed.append, "a recording")
    assert printed[0] == "a recording\n"
    assert "quiet" in "".join(printed)
    assert source.now_s == source.end_s

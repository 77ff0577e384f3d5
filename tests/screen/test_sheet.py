"""The whole screen as text, at the sizes it is made for and at those it is not."""

from __future__ import annotations

from datetime import timedelta, timezone
from pathlib import Path

import numpy as np
import pytest
from rich.cells import cell_len

from monitor.blocks import Event
from monitor.screen import axis, foot, sheet, text
from monitor.screen.figures import Clock, Scale
from monitor.screen.look import Look
from monitor.screen.replayed import ReplaySource
from tests.screen import invented

DOSE = Event(120.0, "dose", {"tank": "t1", "liquid": "saline", "volume_ml": 120.0, "id": "d1"})
LANDS_PCT = (0.08 * 1200 + 0.15 * 120) / 1320
CLOCK = Clock(invented.STARTED.astimezone(timezone(timedelta(hours=1))))
SIZES = [(40, 12), (80, 24), (120, 40), (200, 60)]


def three_tanks(folder: Path, label: str = "") -> ReplaySource:
    """A dosed tank, one with bubbles, a still one."""
    settings = invented.bench(3, label)
    texts = {
        "p1": invented.log_text(
            settings, "p1", salinity=invented.dosed(123.0, LANDS_PCT), events=[DOSE]
        ),
        "p2": invented.log_text(settings, "p2", factor=invented.bubbles(200.0, 300.0)),
        "p3": invented.log_text(settings, "p3"),
    }
    return ReplaySource([invented.saved(folder, text, name) for name, text in texts.items()])


def at(source: ReplaySource, t: float) -> ReplaySource:
    source.seek(t)
    source.advance()
    return source


def drawn(source: ReplaySource, width: int, height: int, look: Look | None = None) -> list[str]:
    rows = sheet.draw(source, look or Look(), width, height, CLOCK).rows
    return [text.plain(row) for row in rows]


@pytest.mark.parametrize(("width", "height"), SIZES)
def test_every_size_is_filled_to_the_cell(tmp_path: Path, width: int, height: int) -> None:
    rows = drawn(at(three_tanks(tmp_path), 260.0), width, height)
    assert len(rows) == height
    assert {cell_len(row) for row in rows} == {width}


@pytest.mark.parametrize(("width", "height"), SIZES)
def test_the_three_questions_are_answered_at_every_size(
    tmp_path: Path, width: int, height: int
) -> None:
    page = "\n".join(drawn(at(three_tanks(tmp_path), 290.0), width, height))
    assert "look at t2" in page.split("\n")[0]
    assert "at rest" in page
    assert "doubtful, bubbles" in page


def test_the_worst_comes_first_where_there_is_little_room(tmp_path: Path) -> None:
    rows = drawn(at(three_tanks(tmp_path), 290.0), 40, 12)
    assert "t2" in rows[1]
    assert "doubtful, bubbles" in rows[2]


def test_lanes_keep_their_places_until_asked(tmp_path: Path) -> None:
    source = at(three_tanks(tmp_path), 290.0)
    places = [row[1:3] for row in drawn(source, 80, 24) if row[1:3] in ("t1", "t2", "t3")]
    assert places == ["t1", "t2", "t3"]
    places = [
        row[1:3]
        for row in drawn(source, 80, 24, Look(worst_first=True))
        if row[1:3] in ("t1", "t2", "t3")
    ]
    assert places[0] == "t2"


def test_a_dose_stands_at_the_same_column_in_lane_and_landing_view(tmp_path: Path) -> None:
    rows = drawn(at(three_tanks(tmp_path), 140.0), 80, 24)
    columns = {row.index("▲") for row in rows if "▲" in row}
    assert len(columns) == 1
    assert sum("▲" in row for row in rows) == 2


def test_the_future_has_the_last_third(tmp_path: Path) -> None:
    rows = drawn(at(three_tanks(tmp_path), 140.0), 80, 24)
    now = next(row.index("╵now") for row in rows if "╵now" in row)
    assert now == pytest.approx(10 + 70 * 2 / 3, abs=2)
    assert any("rest 19:0" in row[now:] or "settling" in row for row in rows)
    assert any(0x2800 < ord(char) < 0x2900 for row in rows[8:18] for char in row[now + 2 :])


def test_evidence_stands_beside_the_accusation(tmp_path: Path) -> None:
    source = at(three_tanks(tmp_path), 290.0)
    page = "\n".join(drawn(source, 120, 40, Look(chosen=1)))
    assert "doubtful: bubbles, " in page
    assert "jumps up" in page
    assert "tap the probe" in page


@pytest.mark.parametrize(
    ("width", "height"), [*SIZES, (1, 1), (7, 3), (59, 15), (60, 16), (333, 9)]
)
def test_any_size_and_any_name(tmp_path: Path, width: int, height: int) -> None:
    label = "\\u001b[31mx\\u202e\\u200b" + "🐟" * 60 + "界" * 60
    source = three_tanks(tmp_path, label)
    for t in (0.0, 130.0, 290.0):
        for look in (Look(), Look(chosen=1, span_s=1e6), Look(helping=True), Look(cursor_t=50.0)):
            rows = drawn(at(source, t), width, height, look)
            assert len(rows) == height
            for row in rows:
                assert cell_len(row) == width
                assert row.isprintable()


def test_before_the_first_reading(tmp_path: Path) -> None:
    page = "\n".join(drawn(three_tanks(tmp_path), 80, 24))
    assert "no reading yet" in page


def test_what_was_read_at_the_cursor(tmp_path: Path) -> None:
    source = at(three_tanks(tmp_path), 290.0)
    told = foot.reading(source.lanes[0], 60.5, CLOCK, Scale("%"))
    assert told.startswith("19:01:00  0.0800 % · 89")
    assert told.endswith("25.00 C")
    assert foot.reading(source.lanes[0], 9e9, CLOCK, Scale("%")).endswith("no reading")


def test_units_change_all_figures_at_once(tmp_path: Path) -> None:
    source = at(three_tanks(tmp_path), 110.0)
    page = "\n".join(drawn(source, 80, 24, Look(unit="g/kg")))
    assert "0.800" in page
    assert "0.0800" not in page
    assert "g/kg" in page.split("\n")[0]


def test_many_lanes_scroll_to_the_chosen(tmp_path: Path) -> None:
    settings = invented.bench(16)
    paths = [
        invented.saved(tmp_path, invented.log_text(settings, f"p{i}", 30.0), f"p{i}")
        for i in range(1, 17)
    ]
    source = at(ReplaySource(paths), 29.0)
    look = Look(chosen=15)
    rows = drawn(source, 80, 24, look)
    assert any(row.startswith(f"▶{source.lanes[15].tank}") for row in rows)
    assert any("above" in row and "below" in row for row in rows)


def test_a_long_run_is_drawn_from_minutes_up_to_the_present(tmp_path: Path) -> None:
    text_of = invented.log_text(invented.bench(), length_s=3000.0)
    source = at(ReplaySource([invented.saved(tmp_path, text_of)]), 2970.0)
    on = axis.axis(70, 7200.0, source.now_s, None)
    drawn_there = axis.columns(source.lanes[0], on)[0]
    filled = np.flatnonzero(np.isfinite(drawn_there.low))
    first, last = 2 * on.cell(30.0), 2 * on.now_cell
    assert filled[0] <= first + 2
    assert filled[-1] >= last - 1
    assert len(filled) == filled[-1] - filled[0] + 1

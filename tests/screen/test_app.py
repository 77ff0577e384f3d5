"""The app itself: keys, clicks, sizes, acts, a monkey; pictures held against those kept."""

from __future__ import annotations

import os
import random
from datetime import timedelta
from pathlib import Path

import pytest
from rich.cells import cell_len
from textual import events
from textual.geometry import Size

from monitor.screen import text
from monitor.screen.app import Screen
from monitor.screen.replayed import ReplaySource
from tests.screen import fixed, invented, pictured
from tests.screen.test_sheet import three_tanks

ZONE = timedelta(hours=1)
KEYS = (
    *"dsnowz+-0cru?fg<>hjkb.,123abc",
    *("up", "down", "left", "right", "tab", "enter", "escape", "backspace", "space", "pageup"),
)


def screen(source: object, colour: bool = True) -> Screen:
    return Screen(source, zone=ZONE, light=False, colour=colour)  # type: ignore[arg-type]


def shown(app: Screen) -> str:
    return "\n".join(text.plain(row) for row in app.sheet.rows)


async def test_q_leaves_and_closes_the_source() -> None:
    source = fixed.mixing()
    app = screen(source)
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("q")
    assert source.closed
    assert app.return_code == 0


async def test_a_tank_is_chosen_by_key_and_by_click() -> None:
    app = screen(fixed.mixing())
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("down")
        assert "▶t2" in shown(app)
        row = next(i for i, line in enumerate(shown(app).split("\n")) if line.startswith(" t3"))
        await pilot.click(offset=(5, row))
        assert "▶t3" in shown(app)


async def test_zoom_pan_cursor_and_back() -> None:
    app = screen(fixed.mixing())
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("+")
        assert app.look.span_s == 120.0
        await pilot.press("left")
        assert "looking back to 19:0" in shown(app)
        await pilot.press("0", "c", "left", "left")
        assert " % · 7" in shown(app) or " % · 8" in shown(app)  # what was read there, us
        await pilot.press("escape")
        assert app.look.cursor_t is None
        await pilot.click(offset=(30, 14))
        assert app.look.cursor_t is not None


async def test_a_dose_is_planned_seen_and_then_recorded_once() -> None:
    source = fixed.mixing()
    app = screen(source)
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("down", "down", "d")
        assert "Enter does nothing yet" in shown(app)
        await pilot.press("enter")
        assert source.orders == []
        await pilot.press("tab", "6", "0")
        assert "60 mL takes it from 0.0905 to 0.0933" in shown(app)
        await pilot.press("enter", "enter")
        await pilot.pause()
        assert [(o[0], o[1]["volume_ml"], o[2]) for o in source.orders] == [("dose", 60.0, "p3")]
        assert "recorded: a dose" in shown(app)


async def test_a_refused_order_is_said_and_the_form_kept() -> None:
    source = fixed.mixing()
    source.refusal = "no service runs on this bench file"
    app = screen(source)
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("n", *"hi", "enter")
        await pilot.pause()
        assert app.look.form is not None
        assert app.look.form["text"] == "hi"
        await pilot.press("escape")
        assert "NOT RECORDED: no service runs" in shown(app)


async def test_keys_typed_into_a_form_are_text() -> None:
    app = screen(fixed.mixing())
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("n", *"quit?")
        assert app.look.form is not None
        assert app.look.form["text"] == "quit?"


@pytest.mark.parametrize(
    ("name", "size", "keys"),
    [
        ("mixing-40x12", (40, 12), ()),
        ("mixing-80x24", (80, 24), ()),
        ("bubbles-120x40", (120, 40), ("down",)),
        ("dose-80x24", (80, 24), ("down", "down", "d", "tab", "6", "0")),
        ("help-80x24", (80, 24), ("?",)),
    ],
)
async def test_it_looks_as_it_was_kept(
    name: str, size: tuple[int, int], keys: tuple[str, ...]
) -> None:
    app = screen(fixed.mixing())
    async with app.run_test(size=size) as pilot:
        await pilot.press(*keys)
        await pilot.pause()
        assert pictured.holds(app, name)


async def test_without_colour_no_colour_is_sent() -> None:
    app = screen(fixed.mixing(), colour=False)
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("down")
        styles = {
            segment.style
            for strip in app.paper.strips
            for segment in strip
            if segment.style is not None
        }
        assert styles
        assert all(style.color is None and style.bgcolor is None for style in styles)


KEYS_PRESSED = int(os.environ.get("MONKEY_KEYS", "400"))


@pytest.mark.parametrize("seed", [1, 2])
async def test_a_monkey_breaks_nothing(seed: int, tmp_path: Path) -> None:
    """Random keys, clicks and sizes; MONKEY_KEYS=10000 for the long form."""
    lot = random.Random(seed)
    source = three_tanks(tmp_path, "🐟\\u001b[2J" * 20)
    source.speed = 600.0
    app = screen(source)
    async with app.run_test(size=(80, 24)) as pilot:
        size = Size(80, 24)
        for _ in range(KEYS_PRESSED):
            choice = lot.random()
            if choice < 0.05:
                size = Size(lot.randint(1, 210), lot.randint(1, 62))
            elif choice < 0.15:
                app.clicked(lot.randrange(size.width), lot.randrange(size.height))
            else:
                key = lot.choice(KEYS)
                app.on_key(events.Key(key, key if len(key) == 1 else None))
            if lot.random() < 0.2:
                source.poll()
            app.redraw(size)
            assert len(app.sheet.rows) == size.height
            assert {cell_len(text.plain(row)) for row in app.sheet.rows} == {size.width}
        await pilot.resize_terminal(100, 30)
        await pilot.pause()
        await pilot.press("escape", "escape", "0")
        assert app.is_running


async def test_nan_everywhere(tmp_path: Path) -> None:
    settings = invented.bench(1, standards=False)
    text = invented.log_text(settings, length_s=30.0, silent=(0.0, 20.0))
    app = screen(ReplaySource([invented.saved(tmp_path, text)]))
    async with app.run_test(size=(100, 30)) as pilot:
        lane = fixed.FixedLane("p1", settings.for_probe("p1"))
        nan = float("nan")
        lane.value = lane.u95 = lane.tank_ml = lane.tank_u_ml = nan
        lane.moving = True
        lane.outlook = dict.fromkeys(
            ("t", "salinity_pct", "u95_pct", "rest_in_s", "rest_in_u95_s"), nan
        )
        app.source = fixed.FixedSource([lane], 30.0)
        app.tick()
        await pilot.press("d", "tab", "5", "enter", "escape", "c", "left", "+", "u")
        assert app.is_running


def test_only_changed_rows_are_drawn_again(monkeypatch: pytest.MonkeyPatch) -> None:
    app = screen(fixed.mixing())
    drawn: list[object] = []
    monkeypatch.setattr(app.paper, "refresh", lambda *regions: drawn.append(regions))
    rows = [[("a", "")], [("b", "")], [("c", "")]]
    app.paper.show(rows, 1)
    app.paper.show([[("a", "")], [("x", "")], [("c", "")]], 1)
    app.paper.show([[("a", "")], [("x", "")], [("c", "")]], 1)
    assert [len(regions) for regions in drawn] == [3, 1]  # type: ignore[arg-type]
    assert drawn[1][0].size == Size(1, 1)  # type: ignore[index]

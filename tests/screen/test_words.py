"""The sentences: what is said of a tank in each state, and how much it asks of a person."""

from __future__ import annotations

from datetime import timedelta, timezone
from pathlib import Path

import pytest

from monitor.blocks import Event
from monitor.screen.figures import Clock, Scale
from monitor.screen.replayed import ReplaySource
from monitor.screen.words import ACT, CALM, DOUBT, MOVING, Said, overall, state
from tests.screen import invented

DOSE = Event(120.0, "dose", {"tank": "t1", "liquid": "saline", "volume_ml": 120.0, "id": "d1"})
LANDS_PCT = (0.08 * 1200 + 0.15 * 120) / 1320
CLOCK = Clock(invented.STARTED.astimezone(timezone(timedelta(hours=1))))


def said_at(folder: Path, t: float, **of: object) -> Said:
    settings = of.pop("settings", None) or invented.bench()
    text = invented.log_text(settings, **of)  # type: ignore[arg-type]
    source = ReplaySource([invented.saved(folder, text)])
    source.seek(t)
    source.advance()
    return state(source.lanes[0], source.now_s, CLOCK, Scale("%"))


def test_a_still_tank(tmp_path: Path) -> None:
    said = said_at(tmp_path, 200.0)
    assert said == Said("still for 3 min", CALM)


def test_a_dose_on_its_way(tmp_path: Path) -> None:
    moving = invented.dosed(123.0, LANDS_PCT)
    said = said_at(tmp_path, 135.0, salinity=moving, events=[DOSE])
    assert said.tone == MOVING
    assert said.text.startswith(("still moving, lands at 0.08", "settling at 0.08"))


def test_at_rest_where_it_was_foretold(tmp_path: Path) -> None:
    moving = invented.dosed(123.0, LANDS_PCT)
    said = said_at(tmp_path, 290.0, salinity=moving, events=[DOSE])
    assert said.tone == CALM
    assert said.text.startswith("at rest")


def test_at_rest_elsewhere_needs_a_person(tmp_path: Path) -> None:
    moving = invented.dosed(123.0, 0.0931)
    said = said_at(tmp_path, 290.0, salinity=moving, events=[DOSE])
    assert said.tone == ACT
    assert "NOT WHERE THE DOSE LEADS (0.086" in said.text


def test_bubbles_make_it_doubtful_and_say_why(tmp_path: Path) -> None:
    said = said_at(tmp_path, 290.0, factor=invented.bubbles(200.0, 295.0))
    assert said.tone == DOUBT
    assert said.text.startswith("doubtful, bubbles: ")


def test_silence_is_not_believed(tmp_path: Path) -> None:
    alive = [Event(200.0 + i, "alive", {}) for i in range(60)]
    said = said_at(tmp_path, 250.0, silent=(200.0, 260.0), events=alive)
    assert said.tone == ACT
    assert said.text.startswith("not believed since 19:03: no-pulses, ")


def test_a_lost_link_and_a_lifted_probe(tmp_path: Path) -> None:
    lost = Event(200.0, "gap", {"link": "lost", "why": "un\x1b[31mplugged"})
    alive = [Event(201.0 + i, "alive", {}) for i in range(60)]
    said = said_at(tmp_path, 230.0, events=[lost, *alive], silent=(200.0, 290.0))
    assert said == Said("no link since 19:03: un\\x1b[31mplugged", ACT)
    out = Event(200.0, "out", {"why": "wipe"})
    said = said_at(tmp_path, 230.0, events=[out])
    assert said == Said("probe out of the tank since 19:03 (wipe)", DOUBT)


def test_beyond_its_aim(tmp_path: Path) -> None:
    moving = invented.dosed(100.0, 0.12, tau_s=30.0)
    said = said_at(tmp_path, 290.0, salinity=moving)
    assert said.tone == ACT
    assert "ABOVE its aim (0.1) since 19:0" in said.text


def test_without_standards(tmp_path: Path) -> None:
    said = said_at(tmp_path, 200.0, settings=invented.bench(standards=False))
    assert said.text == "read, but no standards: no salinity"


@pytest.mark.parametrize(
    ("tones", "text", "tone"),
    [
        ((CALM, CALM, CALM), "all is quiet", CALM),
        ((CALM, MOVING, CALM), "1 moving, nothing wrong", MOVING),
        ((DOUBT, MOVING, CALM), "look at a", DOUBT),
        ((CALM, DOUBT, ACT), "c needs you", ACT),
        ((ACT, ACT, ACT), "a, b and 1 more need you", ACT),
    ],
)
def test_the_first_question_over_all_tanks(
    tones: tuple[str, ...], text: str, tone: str, tmp_path: Path
) -> None:
    source = ReplaySource([invented.saved(tmp_path, invented.log_text(invented.bench()))])
    lanes = [(source.lanes[0], Said("", each)) for each in tones]
    assert overall(lanes, ["a", "b", "c"]) == Said(text, tone)

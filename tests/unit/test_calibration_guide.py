"""The guided run at a terminal, fed without a port: what is typed, kept and taken up again."""

from __future__ import annotations

import json
import math
import random
from pathlib import Path

import pytest

from monitor.bench import Probe
from monitor.commands import Refusal
from monitor.commands.guide import Guide

PROBE = Probe(tank="t1", tick_us=0.5, port="/dev/null")


def wire(guide: Guide, period_us: float, seconds: int, from_s: float) -> float:
    """Lines of a probe at rest, 10 a second."""
    rng = random.Random(period_us)
    for i in range(10 * seconds):
        period = period_us * math.exp(0.001 * rng.gauss(0, 1))
        guide._bytes(f"{round(2 * period) / 2},24.5\r\n".encode(), from_s + i / 10)
    return from_s + seconds


def test_it_is_left_and_taken_up_again(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    resume = tmp_path / "left.json"
    guide = Guide(PROBE, [0.1, 0.05], 120, resume)
    guide._up()
    guide._obey("0.1 %")
    at = wire(guide, 474.0, 60, 100.0)
    kept = json.loads(resume.read_text())
    assert kept == guide.run.taken
    assert kept[0]["salinity_pct"] == 0.1
    assert kept[0]["period_us"] == pytest.approx(474.0, rel=1e-3)
    assert "taken" in kept[0]
    guide._obey("0.05")
    wire(guide, 906.0, 10, at)
    again = Guide(PROBE, [0.1, 0.05], 120, resume)
    assert again.run.taken == kept
    assert "going on with 1 standards" in capsys.readouterr().out
    again._obey("drop")
    assert not resume.exists()


def test_a_file_that_cannot_be_taken_up_is_said(tmp_path: Path) -> None:
    resume = tmp_path / "left.json"
    resume.write_text('[{"salinity_pct": "much"}]')
    with pytest.raises(Refusal, match="remove it"):
        Guide(PROBE, [], 120, resume)


def test_what_is_typed_wrongly_is_said(capsys: pytest.CaptureFixture[str]) -> None:
    guide = Guide(PROBE, [0.1], 120, None)
    for word in ("much", "-1", "nan", "\x1b[2J", "99"):
        guide._obey(word)
        said = capsys.readouterr().out
        assert "is not understood" in said
        assert "\x1b" not in said
    assert guide.run.phase == "ask"


def test_one_in_question_is_settled_first(capsys: pytest.CaptureFixture[str]) -> None:
    guide = Guide(PROBE, [], 120, None)
    guide._up()
    guide._obey("0.1")
    at = wire(guide, 474.0, 60, 0.0)
    guide._obey("0.05")
    wire(guide, 300.0, 60, at)
    assert guide.run.phase == "question"
    guide._obey("0.15")
    guide._obey("done")
    assert capsys.readouterr().out.count("first: keep or drop") == 2
    guide._obey("keep")
    assert guide.run.phase == "ask"

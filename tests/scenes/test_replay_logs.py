"""The recorded logs against their truth, and nothing said from later data."""

from __future__ import annotations

import json
from collections import Counter
from pathlib import Path
from typing import Any

import pytest

from monitor.bench import parse
from monitor.findings import line
from monitor.replay import open_logs, replay
from tests.scenes import said, score
from tests.scenes.tally import Tally

LOGS = Path(__file__).parents[2] / "replay_logs"
NAMES = sorted(path.name.removesuffix(".truth.json") for path in LOGS.glob("*.truth.json"))
FAULTS = ("bubbles", "fouling", "hum", "lodged-bubble", "loose-lead", "no-pulses", "short", "stuck")


def files(name: str) -> list[Path]:
    return sorted([*LOGS.glob(f"{name}.log*"), *LOGS.glob(f"{name}.part*.log*")])


def findings(name: str) -> tuple[list[dict[str, Any]], Counter[str]]:
    bench = parse((LOGS / f"{name}.bench.toml").read_text())
    probes = open_logs([str(path) for path in files(name)], bench)
    found = [json.loads(line(f)) for batch in replay(probes) for f in batch]
    return found, probes[0].told.dropped


@pytest.mark.parametrize("name", NAMES)
def test_what_is_said_holds_against_the_truth(name: str) -> None:
    """No early rest, no rest missed, right verdicts, faults found in time, none invented."""
    tally = Tally()
    (scene,) = said.scenes(LOGS, name)
    found, _ = findings(name)
    score.score_found(tally, scene, found)
    assert (tally.missed, tally.early, tally.early_wrong) == (0, 0, 0)
    assert tally.caught_wrong == tally.n_wrong
    assert tally.true_verdict == tally.n_right
    assert tally.false_faults == []
    assert tally.late_faults == []
    assert tally.malformed == []
    assert all(delay is not None for delays in tally.faults.values() for delay in delays)
    assert tally.trend_hit == tally.trend_n


@pytest.mark.parametrize("fault", FAULTS)
def test_each_fault_has_a_beginning_an_end_and_evidence(fault: str) -> None:
    found, _ = findings(f"{fault}-001")
    said_first = next(f for f in found if f.get("fault") == fault)
    assert said_first["to_t"] is None
    assert said_first["from_t"] <= said_first["t"]
    assert len(said_first["evidence"]) > 20
    beliefs = [f["belief"] for f in found if f["finding"] == "belief"]
    hidden = fault in ("no-pulses", "short", "stuck", "loose-lead", "lodged-bubble")
    assert ("not-believed" if hidden else "doubtful") in beliefs


def test_a_hostile_log_is_judged_and_every_dropped_line_counted() -> None:
    found, dropped = findings("hostile-01")
    rests = [f for f in found if f["finding"] == "rest"]
    assert [f["verdict"] for f in rests] == ["agrees"]
    assert dropped["line over 1 MB"] == 1
    assert dropped["torn"] == 1
    assert dropped["NUL in line"] == 11
    assert dropped["malformed event"] == 3
    assert dropped["time goes back"] == 25


def test_an_unmarked_lift_is_offered_for_the_record_not_called_a_fault() -> None:
    found, _ = findings("wiped-dose-02")
    last_word = {f["from_t"]: f for f in found if f["finding"] == "fault"}
    assert all(f["withdrawn"] == "the probe was lifted" for f in last_word.values())
    (lift,) = [f for f in found if f["finding"] == "notice"]
    assert lift["what"] == "lift"
    assert lift["from_t"] == pytest.approx(600, abs=10)


def test_a_dose_told_late_closes_the_question_about_its_step() -> None:
    found, _ = findings("late-dose-01")
    asked = [f for f in found if f["finding"] == "notice"]
    assert [f["what"] for f in asked] == ["unrecorded-dose", "unrecorded-dose"]
    assert [f["to_t"] is None for f in asked] == [True, False]

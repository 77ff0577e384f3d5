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


def test_a_working_day_is_told_as_it_was() -> None:
    """Judged by its own settings, as it was live; the bench file was edited meanwhile."""
    logs = [str(path) for path in sorted(LOGS.glob("working-day-01.*.log.gz"))]
    found = [f for batch in replay(open_logs(logs, None)) for f in batch]
    truth = json.loads((LOGS / "working-day-01.happened.json").read_text())["happened"]

    def at(what: str, **more: Any) -> list[float]:
        return [e["t"] for e in truth if e["what"] == what and more.items() <= e.items()]

    def told(kind: str, what: str | None = None) -> list[dict[str, Any]]:
        return [f for f in found if f["finding"] == kind and f.get("what") == what]

    assert told("limit") == []
    standing = {(f["probe"], f["from_t"]): f for f in told("fault")}
    assert all(f.get("withdrawn") for f in standing.values())
    (asleep,) = at("asleep")
    assert {f["from_t"] for f in told("unwatched")} == {asleep}
    verdicts = {f["dose_t"]: f["verdict"] for f in told("rest") if f["dose_t"]}
    well_recorded = at("dose", recorded=1)
    assert [verdicts[t] for t in well_recorded] == ["agrees", "agrees"]
    (unrecorded,) = told("notice", "unrecorded-dose")
    assert unrecorded["value"] == pytest.approx(150.0, rel=0.2)
    assert at("dose", recorded=0) == [pytest.approx(unrecorded["from_t"], abs=30)]
    twice = told("notice", "entered-twice")
    assert at("dose", recorded=2) == [pytest.approx(twice[0]["from_t"], abs=30)]
    assert [f["to_t"] is None for f in twice] == [True, False]
    (lift,) = told("notice", "lift")
    assert at("wipe", marked=False) == [pytest.approx(lift["from_t"], abs=15)]
    swaps = [f["t"] for f in told("notice", "probes-swapped") if f["to_t"] is None]
    exchanged = at("plugs exchanged")
    assert all(0 < t - began < 180 for t, began in zip(swaps, exchanged, strict=True))
    assert len(swaps) == 2

"""Scenes as they are drawn: whole, with a truth that holds, and scored by the rules."""

from __future__ import annotations

import gzip
import json
import math
import re
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from drivers.virtual_tank.mixing import FOREIGN, USUAL, Mixing
from drivers.virtual_tank.tank import Pour
from monitor import bench
from tests.scenes import draw, score, spread
from tests.scenes.said import Scene as Written
from tests.scenes.said import flaw, scenes
from tests.scenes.scene import Scene
from tests.scenes.tally import Tally, summary

ROW = re.compile(rb"\d+\.\d{3},\d+(\.\d+)?,(-?\d+\.\d\d)?")


@pytest.fixture(scope="module")
def drawn(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("scenes")
    asked = "--seed 3 --doses 24 --faults 1 --other 1 --trends 1 --hours 3 --nights 1"
    assert draw.main([str(folder), *asked.split()]) == 0
    return folder


def test_every_family_is_there_and_every_bench_file_checks(drawn: Path) -> None:
    found = list(scenes(drawn, "*"))
    names = {scene.name[:-4] for scene in found}
    assert {f"dose-{kind}" for kind in USUAL} <= names
    assert {f"foreign-{kind}" for kind in FOREIGN} <= names
    assert {*draw.FAULTS, *(f"mixing-{fault}" for fault in draw.DURING)} <= names
    for scene in found:
        assert scene.logs
        assert bench.parse(scene.bench.read_text(), scene.bench.name).tank["t1"].volume_ml


def test_logs_are_in_order_and_parts_join(drawn: Path) -> None:
    for scene in scenes(drawn, "*"):
        if scene.name.startswith("damaged"):
            continue
        last = -math.inf
        for log in scene.logs:
            data = gzip.decompress(log.read_bytes()) if log.suffix == ".gz" else log.read_bytes()
            for line in data.splitlines():
                if line.startswith((b"#", b"time_s")):
                    continue
                assert ROW.fullmatch(line), line
                time_s = float(line.split(b",")[0])
                assert time_s >= last
                last = time_s
    (midnight,) = scenes(drawn, "midnight-*")
    assert [log.name[-10:] for log in midnight.logs] == [".part1.log", ".part2.log"]


def test_same_seed_draws_the_same_files(tmp_path: Path) -> None:
    for folder in ("a", "b"):
        draw.main([str(tmp_path / folder), "--seed", "5", "--doses", "2", "--other", "1"])
    for one in sorted((tmp_path / "a").iterdir()):
        assert one.read_bytes() == (tmp_path / "b" / one.name).read_bytes(), one.name


def test_rest_is_when_a_first_order_answer_enters_the_band() -> None:
    """Poured in within O s and mixed with tau: from the close on, what is still to come is
    step tau/O (1 - exp(-O/tau)) exp(-x/tau), so the band is entered tau ln(that/band) later."""
    scene = Scene("x", "dose", np.random.default_rng(8), kind="stirred")
    tank, tau, open_s = scene.tank, 14.0, 20.0
    tank.mixing = Mixing("stirred", tau, delay_s=2.0, turbulence=0.0)
    pour: Pour = tank.pour(100.0, 0.15, 0.2 * tank.volume_ml, open_s)
    dose: dict[str, Any] = {"t": 100.0, "final_pct": pour.final_pct}
    left = pour.step_pct * tau / open_s * (1 - math.exp(-open_s / tau))
    expected = 100.0 + 2.0 + open_s + tau * math.log(abs(left) / scene.band_pct)
    assert scene.rest_s(dose, 1000.0) == pytest.approx(expected, abs=0.25)
    assert scene.rest_s(dose, expected - 5.0) is None  # the next dose came first


def test_truth_of_the_ledger(drawn: Path) -> None:
    """A right dose lands where its mass balance says, within what is not known of it; wrong not."""
    for scene in scenes(drawn, "*-dose-*"):
        settings = bench.parse(scene.bench.read_text())
        if settings.tank["t1"].mode != "grows" or len(scene.truth["doses"]) != 1:
            continue
        (dose,) = scene.truth["doses"]
        text = b"".join(
            gzip.decompress(p.read_bytes()) if p.suffix == ".gz" else p.read_bytes()
            for p in scene.logs
        )
        found = re.search(rb"#! [\d.]+ dose (\{.*\})", text)
        assert found
        said = json.loads(found[1])
        liquid, volume = settings.liquid[said["liquid"]], settings.tank["t1"].volume_ml
        assert volume
        before = dose["final_pct"] - dose["step_pct"]
        after = (before * volume + liquid.salinity_pct * said["volume_ml"]) / (
            volume + said["volume_ml"]
        )
        u = abs(after - before) * math.hypot(0.012, 0.005, 0.01)
        assert (abs(after - dose["final_pct"]) < 4 * u) != dose["ledger_wrong"], scene.name


def perfect(scene: Written, late_s: float) -> list[dict[str, Any]]:
    """What a program would say that knows the truth, `late_s` after it."""
    out: list[dict[str, Any]] = []
    for dose, until in scene.doses:
        if dose["rest_t"] is None or dose["rest_t"] + late_s >= until:
            continue
        verdict = "disagrees" if dose["ledger_wrong"] else "agrees"
        same = {"salinity_pct": dose["final_pct"], "u95_pct": 1e-5, "dose_t": dose["t"]}
        out.append({"finding": "outlook", "t": dose["t"] + 1.0, **same})
        known = max(dose["rest_t"], dose.get("learned_t", 0.0)) + late_s
        rest = {"finding": "rest", "rested_t": dose["rest_t"], "verdict": verdict, **same}
        out.append({**rest, "t": known})
    for fault in scene.truth["faults"]:
        said = {"finding": "fault", "fault": fault["fault"], "from_t": fault["from_t"]}
        out.append({**said, "t": fault["from_t"] + 5.0, "to_t": None})
        if fault["to_t"] < scene.truth["duration_s"]:
            out.append({**said, "t": fault["to_t"], "to_t": fault["to_t"]})
    if rate := scene.truth["trend_pct_per_h"]:
        figures = {"pct_per_h": rate, "u95_pct_per_h": abs(rate) / 5}
        out.append({"finding": "trend", "t": 7200.0, "from_t": 0.0, **figures})
    return sorted(out, key=lambda record: record["t"])


def scored(drawn: Path, late_s: float) -> Tally:
    """A tally of what `perfect` says, through a command as the program would be run."""
    command = f'{sys.executable} -c "import sys; print(open(sys.argv[1]).read())" {{bench}}.said'
    tally = Tally()
    for scene in scenes(drawn, "*"):
        said = "\n".join(json.dumps(record) for record in perfect(scene, late_s))
        Path(f"{scene.bench}.said").write_text(said)
        score.score(tally, scene, command, None)
    return tally


def test_scorer_finds_nothing_wrong_with_the_truth(drawn: Path) -> None:
    tally = scored(drawn, 3.0)
    assert (tally.missed, tally.early, tally.early_wrong, tally.broken) == (0, 0, 0, [])
    assert tally.doses >= 24
    assert tally.late == pytest.approx([3.0] * len(tally.late))
    assert tally.plateau_in == len(tally.u95)
    assert tally.outlook_in == len(tally.outlook_u95) > 10
    assert tally.true_verdict == tally.n_right
    assert tally.caught_wrong == tally.n_wrong == 1
    assert (tally.false_faults, tally.late_faults, tally.unended) == ([], [], 0)
    assert all(None not in found for found in tally.faults.values())
    assert tally.trend_hit == tally.trend_n == 2
    assert (tally.false_trends, tally.malformed, tally.bad_rests) == ([], [], [])
    assert "early 0" in "\n".join(summary(tally))


def test_scorer_counts_rests_that_came_too_soon(drawn: Path) -> None:
    tally = scored(drawn, -4.0)
    assert tally.early + tally.early_wrong == tally.doses - tally.missed
    assert tally.worst_early == pytest.approx(4.0)


@pytest.mark.parametrize(
    ("record", "wrong"),
    [
        ({"finding": "rest", "t": 1.0, "rested_t": 1.0, "salinity_pct": math.nan}, "salinity_pct"),
        ({"finding": "fault", "t": 1.0, "from_t": None}, "from_t"),
        ({"finding": "outlook", "t": 1.0, "salinity_pct": 1, "u95_pct": 1}, "dose_t"),
        ({"finding": "belief", "t": 0.5}, "t goes back"),
        ({"finding": "belief", "t": True}, "t"),
        ([1], "no object"),
        ({"finding": "belief", "t": 1.0}, None),
    ],
)
def test_malformed_records_are_named(record: Any, wrong: str | None) -> None:
    assert flaw(record, 0.8) == wrong


def test_program_that_fails_is_counted_as_broken(drawn: Path) -> None:
    tally = Tally()
    (scene,) = scenes(drawn, "wrong-*")
    line = score.score(tally, scene, f"{sys.executable} -c raise(SystemExit(3))", None)
    assert "exit 3" in line
    assert (tally.missed, tally.doses, tally.n_wrong) == (1, 1, 1)


def test_scripted_rule_waits_for_its_window() -> None:
    level = np.concatenate([np.full(100, 0.08), np.linspace(0.08, 0.09, 30), np.full(170, 0.09)])
    dose = {"t": 100.0}
    assert spread.declared(level, dose, 45, 0.001) == pytest.approx(130 + 45, abs=4)
    assert spread.declared(level[:150], dose, 45, 0.001) == -1


def test_figures_are_printed_and_kept(
    drawn: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    kept = tmp_path / "figures.json"
    nothing = f"{sys.executable} -c pass"
    asked = [str(drawn), "--only", "dose-*", "--spread", "--cuts", "--json", str(kept)]
    assert score.main([*asked, "--command", nothing]) == 0
    said = capsys.readouterr().out
    assert "spread over 45 s: 12 doses" in said
    assert "scenes where a finding used later data: 0" in said
    assert json.loads(kept.read_text())["missed"] == 12

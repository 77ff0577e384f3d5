"""`stillbrine tell ...` to a running service: each kind ends as an event in the log."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

from tests.service.running import MAIN, OnPtys, Run, events, running


def tell(run: Run, bench: OnPtys, *words: str) -> subprocess.CompletedProcess[str]:
    line = [sys.executable, "-c", MAIN, "tell", *words, "--bench", str(bench.path)]
    return subprocess.run(line, capture_output=True, text=True, env=run.environ, timeout=30)


def test_each_kind_is_in_the_log(tmp_path: Path) -> None:
    with OnPtys(tmp_path) as bench, running(bench, tmp_path) as run:
        words = "dose t1 --liquid saline --volume 20 --volume-u 0.2 --by ab --ago 2m"
        said = tell(run, bench, *words.split())
        assert (said.returncode, said.stderr) == (0, "")
        (dose,) = events(run.log(), "dose")
        assert said.stdout.split()[-1] == dose["id"]
        assert {key: dose[key] for key in ("liquid", "volume_ml", "volume_u_ml", "by")} == {
            "liquid": "saline",
            "volume_ml": 20.0,
            "volume_u_ml": 0.2,
            "by": "ab",
        }
        assert dose["TIME"] < -100
        for kind, words in {
            "strike": f"strike t1 {dose['id']} --why typo",
            "water": "water t1 --out 100 --in 100 --liquid deionised",
            "out": "out --why wipe",
            "back": "back",
            "silence": "silence bubbles --for 2h",
            "answer": "answer other-probe no --probe p1",
            "compare": "compare 0.081 --u 0.001 --what refractometer",
        }.items():
            assert tell(run, bench, *words.split()).returncode == 0, words
            assert len(events(run.log(), kind)) == 1
        hostile = "\x1b[2J\u202e<b>"
        assert tell(run, bench, "note", hostile).returncode == 0
        assert [e["text"] for e in events(run.log(), "note")] == [hostile]
        assert "\x1b" not in run.log().read_text()  # escaped, as JSON has it
        assert run.end() == 0
        refused = tell(run, bench, "note", "nobody is there")
        assert refused.returncode == 1
        assert refused.stderr.startswith("stillbrine: no service runs on this bench file")


def test_refusals_are_one_line(tmp_path: Path) -> None:
    with OnPtys(tmp_path) as bench, running(bench, tmp_path) as run:
        for words, code, why in (
            ("dose t7 --liquid saline --volume 5", 1, "tank 't7' has no probe"),
            ("dose t1 --liquid milk --volume 5", 1, "liquid 'milk' is not on the bench"),
            ("dose t1 --liquid saline", 1, "no amount"),
            ("dose t1 --liquid saline --volume nan", 2, "no amount"),
            ("dose t1 --liquid saline --volume 5 --ago soon", 2, "no length of time"),
            ("silence all --for 48h", 1, "expected a time within the next 24 h"),
            ("calibration \x1b]0;x\x07", 1, "is not in the bench file"),
        ):
            said = tell(run, bench, *words.split())
            assert said.returncode == code, said.stderr
            assert why in said.stderr
            assert said.stderr.count("\n") == 1
            assert said.stderr.strip().isprintable()
        assert not events(run.log(), "dose")

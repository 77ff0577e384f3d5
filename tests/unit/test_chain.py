"""The fold of one log: settings in, settings changed, settings that do not check."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from monitor.chain import Chain
from monitor.findings import line
from monitor.logbook.codec import event_of
from monitor.logbook.reader import LogError
from monitor.replay import open_logs, replay

HEAD = "# stillbrine log 1\n# probe: p1\n# started: 2026-03-14T18:00:00Z\ntime_s,period_us,temp_c\n"
BENCH = {"probe": {"p1": {"tank": "t1"}}, "tank": {"t1": {"rest_band_pct": 0.001}}}


def bench_line(t: float = 0.0, **probe: object) -> str:
    settings = {**BENCH, "probe": {"p1": {"tank": "t1", **probe}}}
    return f"#! {t:.3f} bench {json.dumps(settings)}\n"


def written(folder: Path, text: str) -> str:
    path = folder / "p1-20260314T180000Z-001.log"
    path.write_text(text)
    return str(path)


def test_a_log_without_settings_asks_for_a_bench(tmp_path: Path) -> None:
    log = written(tmp_path, HEAD + "0.000,500,24\n9.000,500,24\n")
    with pytest.raises(LogError, match="expected --bench"):
        list(replay(open_logs([log], None)))


def test_a_log_of_less_than_a_second_says_nothing(tmp_path: Path) -> None:
    log = written(tmp_path, HEAD + bench_line() + "0.000,500,24\n0.500,500,24\n")
    assert list(replay(open_logs([log], None))) == []


def fed(*lines: str) -> Chain:
    chain = Chain("p1")
    for text in lines:
        chain.feed(event_of(text.rstrip("\n")))
    return chain


def test_the_same_settings_again_change_nothing() -> None:
    chain = fed(bench_line(), '#! 5.000 note {"text": "a"}')
    judges = chain.judges
    for text in (bench_line(6.0), '#! 9.000 note {"text": "b"}'):
        chain.feed(event_of(text.rstrip("\n")))
    assert chain.judges is judges


def test_other_settings_begin_the_judgement_anew() -> None:
    chain = fed(bench_line(), '#! 5.000 note {"text": "a"}')
    judges = chain.judges
    for text in (bench_line(6.0, label="moved"), '#! 9.000 note {"text": "b"}'):
        chain.feed(event_of(text.rstrip("\n")))
    assert chain.judges is not judges
    assert chain.judges is not None
    assert chain.judges.bench.probe["p1"].label == "moved"


def test_settings_that_do_not_check_are_refused_in_a_line_and_the_old_ones_stay() -> None:
    chain = fed(
        bench_line(),
        '#! 5.000 note {"text": "a"}',
        '#! 6.000 bench {"probe": {"p1": {"tank": "nowhere"}}}',
        '#! 7.000 calibration {"name": 1}',
        '#! 9.000 note {"text": "b"}',
    )
    assert len(chain.refused) == 2
    assert chain.judges is not None


def test_carried_state_that_is_nonsense_is_refused_in_a_line() -> None:
    chain = fed(bench_line(), '#! 0.000 carried {"trust": 3}', '#! 5.000 note {"text": "a"}')
    assert len(chain.refused) == 1
    assert chain.judges is not None


def test_silence_is_judged_at_its_own_time_without_an_alive_line() -> None:
    chain = fed(bench_line())
    found = chain.feed(event_of("#! 100.000 end {}"))
    (fault,) = [f for f in found if f["finding"] == "fault"]
    assert (fault["fault"], fault["from_t"]) == ("no-pulses", 0.0)
    assert fault["t"] < 15.0
    assert json.loads(line(fault))["to_t"] is None

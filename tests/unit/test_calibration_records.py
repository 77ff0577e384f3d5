"""Standards into the bench file and out of tables."""

from __future__ import annotations

import os
import stat
from pathlib import Path
from typing import Any

import pytest

from monitor.bench import BenchError, parse
from monitor.calibration import CalibrationError
from monitor.calibration.records import new_bench, set_name, standards_from_csv, with_standards
from monitor.commands import Refusal, Wrong
from monitor.commands.bench_file import read_bytes, replace, text_of

BENCH = """# what is on my bench
[tank.t1]   # the small one
rest_band_pct = 0.001

[probe.p1]
tank = "t1"   # hangs here
[[probe.p1.standard]]
salinity_pct = 0.05 # an old one
period_us = 900.0

[liquid.saline]
salinity_pct = 0.15
"""
NEW: list[dict[str, Any]] = [
    {"salinity_pct": 0.05, "period_us": 916.2, "sd_us": 3.9, "readings": 120, "temp_c": 25.0},
    {"salinity_pct": 0.1, "period_us": 474.0, "lot": 'a "b"'},
]


def test_a_new_set_is_added_and_nothing_else_changed() -> None:
    out = with_standards(BENCH, "b.toml", "p1", NEW, "2026-12-01")
    assert out.startswith(BENCH)
    probe = parse(out).probe["p1"]
    assert len(probe.standard) == 3
    assert [s.period_us for s in probe.standards_in_force] == [916.2, 474.0]
    assert probe.standards_in_force[1].lot == 'a "b"'
    again = with_standards(out, "b.toml", "p1", NEW[:1], "2026-12-01b")
    assert again.startswith(out)
    assert len(parse(again).probe["p1"].standards_in_force) == 1


def test_a_set_has_a_name_of_its_own() -> None:
    text = BENCH
    for name in ("2026-12-01", "2026-12-01b", "2026-12-01c"):
        assert set_name(parse(text), "p1", "2026-12-01") == name
        text = with_standards(text, "b", "p1", NEW, name)


def test_an_inline_list_of_standards_is_not_broken() -> None:
    inline = BENCH.replace(
        "[[probe.p1.standard]]\nsalinity_pct = 0.05 # an old one\nperiod_us = 900.0\n",
        "standard = [{salinity_pct = 0.05, period_us = 900.0}]\n",
    )
    with pytest.raises(BenchError, match=r"expected \[\[probe.p1.standard\]\] tables"):
        with_standards(inline, "b.toml", "p1", NEW, "x")


def test_the_smallest_bench_file_checks() -> None:
    probe = parse(new_bench("p1", "/dev/ttyUSB0", "sea salt", 0.5)).probe["p1"]
    assert (probe.medium, probe.tick_us, probe.port) == ("sea salt", 0.5, "/dev/ttyUSB0")


def test_a_table() -> None:
    text = "\ufeff# taken by hand\nperiod_us, salinity_pct,temp_c\n916.2,0.05,\n474,0.1,24.5\n"
    assert standards_from_csv(text, "t.csv") == [
        {"salinity_pct": 0.05, "period_us": 916.2},
        {"salinity_pct": 0.1, "period_us": 474.0, "temp_c": 24.5},
    ]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "t.csv: column salinity_pct missing"),
        ("salinity_pct,period_us\n", "no rows"),
        ("salinity_pct,period\n0.1,3", "column period_us missing"),
        ("salinity_pct,period_us,temp\n0.1,3,4", "column 'temp' unknown"),
        ("salinity_pct,period_us\n0.1,many", "row 1: period_us: 'many' is no number"),
        ("salinity_pct,period_us\n0.1,3\n0.1", "row 2: another number of columns"),
        ("salinity_pct,period_us\n0.1,3,4", "row 1: another number of columns"),
        ("salinity_pct,period_us\n0.1,-3", "row 1: period_us"),
        ("salinity_pct,period_us\n0.1,nan", "row 1: period_us"),
        ("salinity_pct,period_us,readings\n0.1,3,2.5", "row 1: readings: '2.5' is no number"),
    ],
)
def test_a_wrong_table_is_refused_in_one_line(text: str, said: str) -> None:
    with pytest.raises(CalibrationError, match=r"t\.csv") as refused:
        standards_from_csv(text, "t.csv")
    assert said in str(refused.value)
    assert "\n" not in str(refused.value)


def test_the_file_is_replaced_whole_and_keeps_its_mode(tmp_path: Path) -> None:
    path = tmp_path / "b.toml"
    path.write_text("old")
    path.chmod(0o640)
    replace(path, b"old", "new")
    assert path.read_text() == "new"
    assert stat.S_IMODE(path.stat().st_mode) == 0o640
    assert os.listdir(tmp_path) == ["b.toml"]


def test_a_file_that_was_changed_meanwhile_is_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "b.toml"
    path.write_text("changed")
    with pytest.raises(Refusal, match="changed by someone else"):
        replace(path, b"old", "new")
    with pytest.raises(Refusal, match="changed by someone else"):
        replace(path, None, "new")
    assert path.read_text() == "changed"


def test_a_link_stays_a_link(tmp_path: Path) -> None:
    path, link = tmp_path / "b.toml", tmp_path / "link.toml"
    path.write_text("old")
    link.symlink_to(path)
    replace(link, b"old", "new")
    assert link.is_symlink()
    assert path.read_text() == "new"


def test_reading(tmp_path: Path) -> None:
    assert read_bytes(tmp_path / "none.toml") is None
    with pytest.raises(Wrong, match="expected a readable bench file"):
        read_bytes(tmp_path)
    with pytest.raises(Wrong, match="byte 1: not UTF-8"):
        text_of(b"a\xff", tmp_path)

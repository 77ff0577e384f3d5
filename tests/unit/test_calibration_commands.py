"""The commands on salinity and standards: fields, exit codes, one line for what is wrong."""

from __future__ import annotations

import json
import resource
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
import typer
from typer.testing import CliRunner

from monitor.bench import parse
from monitor.commands import Refusal, Wrong, calibrate, salinity, standards, verify

SALINITY = [0.025, 0.05, 0.075, 0.1, 0.125, 0.15]
PERIOD = [1370.413, 715.648, 489.947, 374.923, 307.930, 260.240]
TEMP = [24.10, 23.95, 24.00, 24.20, 23.85, 24.05]
HEAD = '[probe.p1]\ntank = "t1"\ntick_us = 0.5\n[tank.t1]\nrest_band_pct = 0.001\n'

app = typer.Typer()
for name, module in {
    "salinity": salinity,
    "standards": standards,
    "verify": verify,
    "calibrate": calibrate,
}.items():
    app.command(name)(module.command)


def table(salinities: list[float] = SALINITY) -> str:
    lines = ["salinity_pct,period_us,sd_us,readings,temp_c"]
    lines += [
        f"{s},{p},{0.0015 * p:.4f},120,{t}"
        for s, p, t in zip(salinities, PERIOD, TEMP, strict=True)
    ]
    return "\n".join(lines) + "\n"


@pytest.fixture
def bench(tmp_path: Path) -> Path:
    """A bench file whose standards were written by `calibrate`."""
    path, csv = tmp_path / "b.toml", tmp_path / "t.csv"
    path.write_text(HEAD)
    csv.write_text(table())
    said = call("calibrate", "--bench", path, "--probe", "p1", "--csv", csv)
    assert "6 standards written" in said.splitlines()[-1]
    return path


def call(*words: object) -> str:
    """Standard output; the command's own exceptions come through."""
    result = CliRunner().invoke(app, [str(word) for word in words], catch_exceptions=False)
    assert result.exit_code == 0, result.output
    return result.stdout


def answers(*words: object) -> list[dict[str, Any]]:
    return [json.loads(line) for line in call(*words, "--json").splitlines()]


def test_salinity_fields(bench: Path) -> None:
    found = answers("salinity", "--bench", bench, "--probe", "p1", "--temp", 24, 500, 245)
    assert list(found[0]) == ["period_us", "temp_c", "salinity_pct", "u95_pct", "inside"]
    assert found[0]["salinity_pct"] == pytest.approx(0.0734115, abs=6e-8)
    assert found[0]["u95_pct"] == pytest.approx(6.22e-5, rel=2e-3)
    assert (found[0]["inside"], found[1]["inside"]) == (True, False)
    assert "outside the standards" in found[1]["note"]
    one = answers("salinity", "--bench", bench, "--probe", "p1", "--temp", 24, "--readings", 1, 500)
    assert one[0]["u95_pct"] > 3 * found[0]["u95_pct"]


def test_salinity_without_a_temperature_says_so_and_widens(bench: Path) -> None:
    words = ["salinity", "--bench", str(bench), "--probe", "p1", "500"]
    result = CliRunner().invoke(app, words, catch_exceptions=False)
    assert "no --temp" in result.stderr
    found = answers(*words)
    assert found[0]["u95_pct"] / found[0]["salinity_pct"] == pytest.approx(0.042, rel=0.05)


def test_salinity_for_a_person(bench: Path) -> None:
    said = call("salinity", "--bench", bench, "--probe", "p1", "--temp", 24, "--budget", 500)
    assert "0.073411 % +- 0.000062" in said
    assert "standards and fit" in said
    assert "degrees of freedom" in said


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--temp", "24", "0.5"], "0.5 us looks like ms"),
        (["--temp", "24", "0.0005"], "looks like s:"),
        (["--temp", "24", "12"], "shorter than this probe can be"),
    ],
)
def test_salinity_of_what_holds_none_is_refused(bench: Path, words: list[str], said: str) -> None:
    with pytest.raises(Refusal, match=said) as refused:
        call("salinity", "--bench", bench, "--probe", "p1", *words)
    assert "\n" not in str(refused.value)


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--probe", "p2", "500"], "expected one of: p1"),
        (["--probe", "p1", "0"], "expected us above 0"),
        (["--probe", "p1", "nan"], "expected us above 0"),
        (["--probe", "p1", "--temp", "85", "500"], "expected -5 to 60"),
        (["--probe", "p1", "--readings", "0", "500"], "expected 1 or more"),
    ],
)
def test_salinity_asked_wrongly(bench: Path, words: list[str], said: str) -> None:
    with pytest.raises(Wrong, match=said):
        call("salinity", "--bench", bench, *words)


def test_salinity_without_standards(tmp_path: Path) -> None:
    path = tmp_path / "b.toml"
    path.write_text(HEAD)
    with pytest.raises(Wrong, match=r"probe.p1.standard: missing"):
        call("salinity", "--bench", path, "--probe", "p1", 500)
    with pytest.raises(Wrong, match="No such file"):
        call("salinity", "--bench", tmp_path / "none.toml", "--probe", "p1", 500)


def test_salinity_is_quick_and_imports_no_scipy(bench: Path) -> None:
    """Under 400 ms on a quiet machine; processor time with room to spare, as others may run too."""
    words = ["salinity", "--bench", str(bench), "--probe", "p1", "--temp", "24", "--json", "500"]
    code = (
        f"import sys; sys.argv[1:] = {words!r}\n"
        "from monitor.cli import main\n"
        "try: main()\n"
        "except SystemExit: pass\n"
        "heavy = {'scipy', 'gsw', 'textual', 'asyncio', 'serial', 'tomlkit'} & set(sys.modules)\n"
        "print(sorted(heavy), file=sys.stderr)"
    )
    took = []
    for _ in range(3):
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        took.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
        assert json.loads(done.stdout)["inside"] is True
        assert done.stderr.splitlines()[-1] == "[]"
    assert min(took) < 0.8


def test_standards_fields() -> None:
    found = answers("standards", "--stock", 1, "--each-ml", 200, "--levels", "0.025,0.1,0")
    names = ["salinity_pct", "stock_ml", "water_ml", "stock_g", "water_g", "salinity_u95_pct"]
    assert [list(line) for line in found] == [names] * 3
    for line in found:
        of_stock_1_pct = line["stock_g"] / (line["stock_g"] + line["water_g"])
        assert of_stock_1_pct == pytest.approx(line["salinity_pct"], abs=1e-6)
    assert answers("standards", "--stock", 1, "--each-ml", 200, "--count", 4)[3][
        "salinity_pct"
    ] == pytest.approx(0.15)
    by_volume = answers(
        "standards", "--stock", 1, "--each-ml", 200, "--levels", 0.1, "--by", "volume"
    )
    assert by_volume[0]["salinity_u95_pct"] > 10 * found[1]["salinity_u95_pct"]


def test_standards_for_a_person() -> None:
    said = call("standards", "--stock", 1, "--each-ml", 200, "--aim", 0.1)
    assert "In all:" in said
    assert "dry salt" in said
    assert "over even spacing" in said


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--stock", "35", "--each-ml", "200"], "35 g/kg is 3.5"),
        (["--stock", "1", "--each-ml", "0"], "mL above 0"),
        (["--stock", "1", "--each-ml", "nan"], "mL above 0"),
        (["--stock", "1", "--each-ml", "9", "--levels", "0.1;0.2"], "no number"),
        (["--stock", "0.1", "--each-ml", "9", "--levels", "0.2"], "0 to the stock's 0.1 %"),
        (["--stock", "1", "--each-ml", "9", "--medium", "sugar"], "one of NaCl, sea salt"),
        (["--stock", "1", "--each-ml", "9", "--by", "eye"], "mass or volume"),
        (["--stock", "1", "--each-ml", "9", "--span", "0.2,0.1"], "below the second"),
        (["--stock", "1", "--each-ml", "9", "--count", "0"], "1 to 50"),
    ],
)
def test_standards_asked_wrongly(words: list[str], said: str) -> None:
    with pytest.raises(Wrong, match=said):
        call("standards", *words)


def test_calibrate_keeps_every_earlier_set(bench: Path) -> None:
    before = bench.read_text()
    csv = bench.with_name("t.csv")
    said = call("calibrate", "--bench", bench, "--probe", "p1", "--csv", csv, "--lot", "b7")
    assert "straight line" in said
    assert bench.read_text().startswith(before)
    probe = parse(bench.read_text()).probe["p1"]
    assert len(probe.standard) == 12
    assert {s.lot for s in probe.standards_in_force} == {"b7"}
    assert len({s.set for s in probe.standard}) == 2
    assert all(s.taken for s in probe.standard)


def test_calibrate_begins_a_bench_file(tmp_path: Path) -> None:
    path, csv = tmp_path / "new.toml", tmp_path / "t.csv"
    csv.write_text(table())
    with pytest.raises(Wrong, match="--port to add it"):
        call("calibrate", "--bench", path, "--probe", "p1", "--csv", csv)
    call("calibrate", "--bench", path, "--probe", "p1", "--csv", csv, "--port", "/dev/ttyUSB0")
    assert len(parse(path.read_text()).probe["p1"].standard) == 6


def test_calibrate_writes_nothing_that_does_not_fit(bench: Path) -> None:
    before = bench.read_bytes()
    csv = bench.with_name("t.csv")
    csv.write_text(table([0.025, 0.075, 0.05, 0.1, 0.125, 0.15]))
    with pytest.raises(Refusal, match="nothing written: the standards contradict each other"):
        call("calibrate", "--bench", bench, "--probe", "p1", "--csv", csv)
    csv.write_text(table([0.025, 0.075, 0.05, 0.1, 0.125, 0.15]).replace("1370.413", "zero"))
    with pytest.raises(Wrong, match="'zero' is no number"):
        call("calibrate", "--bench", bench, "--probe", "p1", "--csv", csv)
    with pytest.raises(Wrong, match="expected a readable table"):
        call("calibrate", "--bench", bench, "--probe", "p1", "--csv", csv.with_name("no.csv"))
    assert bench.read_bytes() == before


def test_verify_keeps_a_history_and_says_moved(bench: Path) -> None:
    words = ["verify", "--bench", bench, "--probe", "p1", "--salinity", 0.1, "--salinity-u", 5e-5]
    assert "no check standard" in call("verify", "--bench", bench, "--probe", "p1")
    good = answers(*words, "--period", 374.923, "--temp", 24.2)[0]
    assert abs(good["e_n"]) < 1
    assert (good["moved"], good["due"], good["checks"]) == (False, False, 1)
    with bench.with_name("b.toml.checks.jsonl").open("a") as file:
        file.write('{"half a line')
    with pytest.raises(Refusal, match="it has moved"):
        call(*words, "--period", 385, "--temp", 24.2)
    lines = bench.with_name("b.toml.checks.jsonl").read_text().splitlines()
    assert [line.startswith('{"utc"') for line in lines] == [True, False, True]
    with pytest.raises(Refusal, match="holds no salinity"):
        call(*words, "--period", 0.4)
    with pytest.raises(Wrong, match="expected a port, or --period"):
        call(*words)

"""`dose` and `valve`: fields, words, exit codes."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
import typer
from typer.testing import CliRunner

from monitor.commands import Refusal, Wrong, dose, valve

BENCH = """
[probe.p1]
tank = "t1"
[tank.t1]
volume_ml = 1200.0
volume_u_ml = 6.0
rest_band_pct = 0.001
fastest_pct_per_h = 0.02
[tank.bare]
rest_band_pct = 0.001
[liquid.saline]
salinity_pct = 0.15
salinity_u_pct = 0.0005
[liquid.deionised]
salinity_pct = 0.0
[valve.saline]
liquid = "saline"
runs = [[1.0, 5.1], [2.0, 10.0], [5.0, 24.8]]
[valve.untimed]
liquid = "saline"
"""

app = typer.Typer()
app.command("dose")(dose.command)
app.command("valve")(valve.command)


@pytest.fixture
def bench(tmp_path: Path) -> Path:
    path = tmp_path / "b.toml"
    path.write_text(BENCH)
    return path


def call(*words: object) -> str:
    """Standard output; the command's own exceptions come through."""
    result = CliRunner().invoke(app, [str(word) for word in words], catch_exceptions=False)
    assert result.exit_code == 0, result.output
    return result.stdout


def test_dose_as_json(bench: Path) -> None:
    words = ("--tank", "t1", "--from", 0.08, "--from-u95", 0.0004, "--to", 0.09, "--json")
    (line,) = call("dose", "--bench", bench, *words).splitlines()
    told = json.loads(line)
    assert list(told) == [
        "liquid",
        "volume_ml",
        "open_s",
        "predicted_pct",
        "predicted_u95_pct",
        "parts",
        "cautions",
    ]
    assert told["liquid"] == "saline"
    assert told["volume_ml"] == pytest.approx(200.0)
    assert told["open_s"] == pytest.approx(2 * -0.16154 / 4.9269 + 200 / 4.9269, rel=1e-4)
    assert told["predicted_pct"] == pytest.approx(0.09)
    assert [part["wait_s"] for part in told["parts"]] == [0.0, 1800.0]
    assert all(isinstance(caution, str) for caution in told["cautions"])


def test_dose_without_a_valve(bench: Path) -> None:
    words = ("--tank", "t1", "--from", 0.08, "--liquid", "deionised", "--volume", 10, "--json")
    told = json.loads(call("dose", "--bench", bench, *words))
    assert told["open_s"] is None
    assert told["parts"][0]["open_s"] is None
    assert told["predicted_pct"] == pytest.approx(0.08 * 1200 / 1210, abs=1e-9)


def test_dose_for_a_person_fits_eighty_columns(bench: Path) -> None:
    text = call("dose", "--bench", bench, "--tank", "t1", "--from", 0.07, "--to", 0.09)
    assert max(map(len, text.splitlines())) <= 80
    assert "open saline for" in text
    assert "after  0 h 00 min" in text
    assert "A fast change of salinity can kill stock" in " ".join(text.split())
    assert "flood or empty a tank" in " ".join(text.split())


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (("--tank", "t9", "--to", 0.1), "--tank 't9': not in b.toml; expected one of bare, t1"),
        (("--tank", "t1", "--liquid", "x", "--volume", 1), "--liquid 'x': not in b.toml"),
        (("--tank", "t1"), "expected --to S2, or --liquid L and --volume ML"),
        (("--tank", "t1", "--volume", 5), "expected --to S2, or --liquid L and --volume ML"),
        (("--tank", "t1", "--to", "nan"), "--to nan: expected 0 to 26"),
        (("--tank", "t1", "--to", 35), "35 g/kg is 3.5"),
        (("--tank", "t1", "--liquid", "saline", "--volume", 0), "--volume 0: expected"),
    ],
)
def test_a_wrong_dose_command(bench: Path, words: tuple[object, ...], expected: str) -> None:
    with pytest.raises(Wrong) as wrong:
        call("dose", "--bench", bench, "--from", 0.08, *words)
    assert expected in str(wrong.value)
    assert "\n" not in str(wrong.value)


@pytest.mark.parametrize(
    ("tank", "to", "expected"),
    [("t1", 0.2, "cannot be reached"), ("bare", 0.09, "nobody knows what it holds")],
)
def test_a_dose_refused(bench: Path, tank: str, to: float, expected: str) -> None:
    with pytest.raises(Refusal, match=expected):
        call("dose", "--bench", bench, "--from", 0.08, "--tank", tank, "--to", to)


def test_valve_as_json(bench: Path) -> None:
    told = json.loads(call("valve", "--bench", bench, "--valve", "saline", "--json"))
    assert list(told) == [
        "ml_per_s",
        "u95_ml_per_s",
        "offset_ml",
        "u95_offset_ml",
        "runs",
        "lack_of_fit_p",
    ]
    assert told["ml_per_s"] == pytest.approx(64.05 / 13.0)  # least squares by hand: Sxy/Sxx
    assert told["runs"] == 3
    assert told["lack_of_fit_p"] is None


def test_valve_for_a_person(bench: Path) -> None:
    text = call("valve", "--bench", bench, "--valve", "saline", "--volume", 20)
    assert "4.927 +- 0.085 mL/s from 3 runs" in text
    assert "20 mL: open 4.03 +-" in text
    opened = json.loads(
        call("valve", "--bench", bench, "--valve", "saline", "--volume", 20, "--json")
    )["openings"]
    assert opened[0]["open_s"] == pytest.approx(4.0266, abs=1e-3)


def test_valves_that_cannot_be_told(bench: Path) -> None:
    with pytest.raises(Wrong, match="expected one of saline, untimed"):
        call("valve", "--bench", bench, "--valve", "v9")
    with pytest.raises(Refusal, match="valve untimed: no timed runs"):
        call("valve", "--bench", bench, "--valve", "untimed")


def test_neither_needs_scipy(bench: Path) -> None:
    code = (
        "import sys; from monitor.commands import dose, valve; from pathlib import Path;"
        f"b = Path({str(bench)!r}); valve.command(b, 'saline');"
        "dose.command(b, 't1', 0.08, to=0.09); sys.exit('scipy' in sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True, capture_output=True)

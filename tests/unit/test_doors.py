"""One hostile string through each door: log, bench file, file name, device, command line.

Nothing that reaches a terminal, an HTML page or a CSV cell may act there.
"""

from __future__ import annotations

import csv
import html.parser
import io
import json
import re
import sys
import unicodedata
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from drivers.serial_port import Plugged
from monitor import cli
from monitor.bench import parse

MARK = "<script>alert(1)</script>"
EVIL = f"=\x1b]0;x\x07\x9b2J\u202e\u200b\x7f\r{MARK}'\"&\u2028" + "a" * 300
ARGUMENT = EVIL[:60]
TABLES = (
    '[probe.p1]\ntank = "t1"\nlabel = LABEL\n'
    "[[probe.p1.standard]]\nsalinity_pct = 0.05\nperiod_us = 1000.0\ntemp_c = 25.0\n"
    "[[probe.p1.standard]]\nsalinity_pct = 0.10\nperiod_us = 510.0\ntemp_c = 25.0\n"
    "[[probe.p1.standard]]\nsalinity_pct = 0.15\nperiod_us = 345.0\ntemp_c = 25.0\n"
    "[tank.t1]\nlabel = LABEL\nvolume_ml = 1000.0\nrest_band_pct = 0.001\n"
    "[liquid.saline]\nsalinity_pct = 0.15\n"
)
FIRST = datetime.now(UTC).replace(microsecond=0) - timedelta(hours=2)


def harmless(text: str) -> None:
    """Nothing in it but plain characters and line ends."""
    bad = {c for c in text if (c != "\n" and unicodedata.category(c)[0] in "C") or c in "\u2028"}
    assert not bad, sorted(map(ascii, bad))


def spoken(capsys: pytest.CaptureFixture[str]) -> str:
    """What a command printed, on either stream."""
    said = capsys.readouterr()
    harmless(said.out)
    harmless(said.err)
    return said.out + said.err


def call(monkeypatch: pytest.MonkeyPatch, *words: object) -> int:
    """The command line in this process; its exit code."""
    monkeypatch.setattr(sys, "argv", ["stillbrine", *map(str, words)])
    with pytest.raises(SystemExit) as ended:
        cli.main()
    return int(ended.value.code or 0)


def event(time_s: float, kind: str, **fields: Any) -> str:
    return f"#! {time_s:.3f} {kind} {json.dumps(fields)}\n"


def bench_text() -> str:
    """A bench file with the string in its labels; TOML writes escapes as JSON does."""
    return TABLES.replace("LABEL", json.dumps(EVIL[:200].replace("\x7f", "\x1b")))


@pytest.fixture
def log(tmp_path: Path) -> Path:
    """A log with the string in every place that takes text."""
    stamp = FIRST.strftime("%Y-%m-%dT%H:%M:%S.000Z")
    path = tmp_path / f"p1-{FIRST:%Y%m%dT%H%M%SZ}-001.log"
    bench = parse(bench_text()).as_event()
    text = (
        f"# stillbrine log 1\n# probe: p1\n# started: {stamp}\n# run: a{MARK}\x1b[2J\n"
        f"# {MARK}\x1b[2J: {MARK}\x1b[2J\ntime_s,period_us,temp_c,{MARK}\n"
    )
    text += event(0.0, "bench", **bench) + event(0.0, f"evil{MARK}"[:4], text=EVIL)
    rows = [f"{t}.000,585.{t % 7},24.98,x\n" for t in range(200)]
    text += "".join(rows[:100])
    dose = {"tank": "t1", "liquid": "saline", "volume_ml": 5.0, "note": EVIL, "by": EVIL}
    text += event(100.0, "dose", **dose, id=EVIL)
    text += event(100.0, "strike", tank="t1", of=EVIL, why=EVIL, by=EVIL)
    text += event(100.0, "water", tank="t1", in_ml=1.0, by=EVIL, id="w")
    text += event(100.0, "note", text=EVIL, by=EVIL)
    text += event(100.0, "compare", salinity_pct=0.1, what=EVIL, by=EVIL)
    text += event(100.0, "check", salinity_pct=0.1, what=EVIL, read_pct=EVIL, by=EVIL)
    text += event(100.0, "answer", of=EVIL, answer=EVIL, by=EVIL)
    text += event(100.0, "silence", what=EVIL, until_utc="2099-01-01T00:00:00Z", by=EVIL)
    text += event(100.0, "gap", link="lost", why=EVIL) + event(100.0, "gap", link="back")
    text += event(100.0, "rejected", n=1, why=EVIL, sample=EVIL)
    text += "".join(rows[100:]) + event(200.0, "out", why=EVIL, by=EVIL) + f"{MARK}\x1b[2J\n"
    text += event(201.0, "calibration", name=EVIL) + event(203.0, "end")
    path.write_text(text)
    return path


@pytest.fixture
def bench(tmp_path: Path) -> Path:
    path = tmp_path / "b.toml"
    path.write_text(bench_text())
    return path


def test_report_as_text(
    log: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call(monkeypatch, "report", log) == 0
    said = spoken(capsys)
    assert "\\x1b]0;x" in said, "what was written is shown, escaped"
    assert "silenced" in said


PLAIN = {
    *("html", "head", "meta", "title", "style", "body", "h1", "h2", "section", "ul", "li", "p"),
    *("footer", "figure", "figcaption", "svg", "polygon", "polyline", "line"),
}


class Tags(html.parser.HTMLParser):
    """Collects the tags and attributes of a page."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))


def test_report_as_html_has_no_script_and_says_so(
    log: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    page = tmp_path / "night.html"
    assert call(monkeypatch, "report", log, "--html", page) == 0
    text = page.read_text()
    harmless(text)
    found = Tags()
    found.feed(text)
    names = {tag for tag, _ in found.tags}
    assert names <= PLAIN
    for _, attributes in found.tags:
        assert not {name for name in attributes if name.startswith("on") or name in ("href", "src")}
    policies = [a["content"] for t, a in found.tags if a.get("http-equiv")]
    assert policies == ["default-src 'none'; style-src 'unsafe-inline'"]
    assert MARK not in text
    assert "&lt;script&gt;" in text
    assert page.stat().st_mode & 0o077 == 0


def rows(text: str) -> Iterator[list[str]]:
    harmless(text)
    yield from csv.reader(io.StringIO(text))


def test_no_csv_cell_is_a_formula(
    log: Path,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    assert call(monkeypatch, "report", log, "--csv", tmp_path / "m.csv") == 0
    spoken(capsys)
    assert call(monkeypatch, "export", log) == 0
    exported = spoken(capsys)
    number = re.compile(r"-?\d+(\.\d+)?")
    for table in (exported, (tmp_path / "m.csv").read_text()):
        lines = list(rows(table))
        assert len(lines) > 3
        assert {len(line) for line in lines} == {len(lines[0])}
        for each in (each for line in lines for each in line):
            assert each[:1] not in ("=", "+", "-", "@") or number.fullmatch(each)


def test_replay_says_what_it_dropped(
    log: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call(monkeypatch, "replay", log, "--findings") == 0
    said = capsys.readouterr()
    harmless(said.err)
    assert said.out.isascii()
    assert all(json.loads(line)["finding"] for line in said.out.splitlines())


def test_handover(
    log: Path, bench: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call(monkeypatch, "handover", "--bench", bench, "--logs", log.parent) == 0
    said = spoken(capsys)
    assert said.startswith("Hand-over")
    assert "\\x1b" in said


def test_a_label_in_the_bench_file(
    bench: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call(monkeypatch, "check", bench, "--listen", 0) == 1
    assert "NO" in spoken(capsys)


@pytest.mark.parametrize("where", ["key", "value", "name", "toml", "port", "bytes"])
def test_a_bench_file_that_is_wrong(
    where: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    text = json.dumps(EVIL.replace("\x7f", ""))
    tables = {
        "key": f"[probe.p1]\ntank = 't1'\n{text} = 1\n",
        "value": f"[probe.p1]\ntank = 't1'\nperiod_unit = {text}\n",
        "name": f"[probe.{text}]\ntank = 't1'\n",
        "toml": f"{EVIL}\n",
        "port": f"[probe.p1]\ntank = 't1'\nport = {text}\n[tank.t1]\nrest_band_pct = 0.1\n",
        "bytes": "\udcff\udc9b",
    }
    path = tmp_path / "b.toml"
    path.write_bytes(tables[where].encode(errors="surrogateescape"))
    assert call(monkeypatch, "check", path) in (1, 2)
    assert "stillbrine: " in spoken(capsys)


def test_what_a_device_says_of_itself(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    found = [Plugged("/dev/ttyUSB0", f"/dev/serial/by-id/{EVIL}", EVIL)]
    monkeypatch.setattr("drivers.serial_port.plugged", lambda: found)
    assert call(monkeypatch, "ports") == 0
    said = spoken(capsys)
    assert len(said.splitlines()) == 1
    assert "\\x1b]0;x" in said


WRONG = {
    "no command": ["{}"],
    "no option": ["report", "--{}"],
    "run": ["run", "--bench", "{}"],
    "watch": ["watch", "--bench", "{}"],
    "replay": ["replay", "{}", "--findings"],
    "replay bench": ["replay", "x.log", "--bench", "{}"],
    "report": ["report", "{}"],
    "report since": ["report", "x.log", "--since", "{}"],
    "report bench": ["report", "--bench", "{}"],
    "handover": ["handover", "--bench", "{}"],
    "export": ["export", "{}"],
    "export until": ["export", "x.log", "--until", "{}"],
    "calibrate": ["calibrate", "--bench", "{}", "--probe", "{}"],
    "calibrate table": ["calibrate", "--bench", "b.toml", "--probe", "p1", "--csv", "{}"],
    "calibrate levels": ["calibrate", "--bench", "b.toml", "--probe", "p1", "--levels", "{}"],
    "calibrate set": ["calibrate", "--bench", "b.toml", "--probe", "p1", "--set", "{}"],
    "verify": ["verify", "--bench", "b.toml", "--probe", "{}"],
    "verify figure": ["verify", "--bench", "b.toml", "--probe", "p1", "--salinity", "{}"],
    "salinity": ["salinity", "--bench", "b.toml", "--probe", "{}", "500"],
    "salinity figure": ["salinity", "--bench", "b.toml", "--probe", "p1", "{}"],
    "standards": ["standards", "--stock", "1", "--each-ml", "9", "--levels", "{}"],
    "standards medium": ["standards", "--stock", "1", "--each-ml", "9", "--medium", "{}"],
    "dose": ["dose", "--bench", "b.toml", "--tank", "{}", "--from", "0.1", "--to", "0.11"],
    "dose liquid": ["dose", "--bench", "b.toml", "--tank", "t1", "--from", "1", "--liquid", "{}"],
    "valve": ["valve", "--bench", "b.toml", "--valve", "{}"],
    "ports": ["ports", "--baud", "{}"],
    "check": ["check", "{}"],
    "tell": ["tell", "note", "{}", "--bench", "b.toml"],
    "tell kind": ["tell", "{}"],
    "tell ago": ["tell", "dose", "t1", "--bench", "b.toml", "--ago", "{}"],
}


@pytest.mark.parametrize("words", WRONG.values(), ids=list(WRONG))
def test_the_error_of_each_command_is_one_harmless_line(
    words: list[str],
    bench: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(bench.parent)
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(bench.parent))
    code = call(monkeypatch, *(word.format(ARGUMENT) for word in words))
    assert code in (1, 2)
    said = capsys.readouterr()
    harmless(said.out)
    harmless(said.err)
    lines = said.err.splitlines()
    assert lines[-1].startswith("stillbrine: ")
    assert len(lines) == 1
    assert len(lines[0]) < 700


@pytest.mark.parametrize("command", ["replay", "report", "export"])
def test_the_name_of_a_file(
    command: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    path = tmp_path / f"{ARGUMENT.replace('/', '')}.log"
    path.write_text(f"{MARK}\x1b[2J\n")
    words = [command, path, *(["--findings"] if command == "replay" else [])]
    assert call(monkeypatch, *words) == 2
    assert len(spoken(capsys).splitlines()) == 1

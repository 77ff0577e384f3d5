"""Many logs judged on many cores, or machines, say what one core says, byte for byte."""

from __future__ import annotations

import io
import multiprocessing
import re
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from monitor.commands import load_bench
from monitor.commands.many import Bar
from monitor.findings import line
from monitor.many import ManyError, judge_logs
from monitor.replay import replay
from tests.scenes.scene import STARTED
from tests.speed.logs import night

MAIN = "from monitor.cli import main; main()"


def stillbrine(*args: str | Path) -> subprocess.CompletedProcess[str]:
    """One run of the command line."""
    return subprocess.run(
        [sys.executable, "-c", MAIN, *map(str, args)], capture_output=True, text=True
    )


def silenced(text: str, from_s: float, to_s: float) -> str:
    """The log without the rows of this span."""
    rows = re.compile(r"(\d+\.\d+),")
    kept = []
    for said in text.splitlines(keepends=True):
        row = rows.match(said)
        if row is None or not from_s <= float(row[1]) < to_s:
            kept.append(said)
    return "".join(kept)


@pytest.fixture(scope="module")
def nights(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two nights of three probes, two of them in one tank that is unwatched for a while."""
    folder = tmp_path_factory.mktemp("nights")
    tables: list[str] = []
    for i, probe in enumerate(("a", "b", "c")):
        log = folder / f"{probe}.log"
        bench = night(log, rate_hz=2.0, hours=0.9, doses=1, seed=i).read_text()
        text = log.read_text() if probe == "c" else silenced(log.read_text(), 1000.0, 1900.0)
        log.write_text(text.replace("\n600.", "\nspoilt 600.", 1))
        later = text.replace(STARTED, STARTED.replace("-14T", "-15T"))
        (folder / f"{probe}-later.log").write_text(later)
        own, _, rest = bench.partition("[tank.t1]")
        tables.append(own.replace('"t1"', '"t2"') if probe == "c" else own)
        tables += ["[tank.t1]", rest.replace("[tank.t1]", "")] if not i else []
        (folder / f"{probe}.bench.toml").unlink()
    tables.append("[tank.t2]\nrest_band_pct = 0.001\nvolume_ml = 2500.0\n")
    (folder / "bench.toml").write_text("".join(tables))
    return folder


def test_the_same_on_one_core_and_on_two(nights: Path) -> None:
    args = ("replay", nights, "--bench", nights / "bench.toml", "--findings", "--jobs")
    alone, pair = stillbrine(*args, "1"), stillbrine(*args, "2")
    assert alone.returncode == pair.returncode == 0, alone.stderr
    for said in ('"rest"', '"unwatched"', '"dose_t"'):
        assert said in alone.stdout
    assert "lines dropped" in alone.stderr
    assert pair.stdout == alone.stdout
    assert pair.stderr == alone.stderr  # and no bar, for this is no terminal


def test_the_report_is_the_same(nights: Path, tmp_path: Path) -> None:
    told = []
    for jobs in ("1", "2"):
        csv, html = tmp_path / f"{jobs}.csv", tmp_path / f"{jobs}.html"
        ran = stillbrine(
            "report", nights, "--bench", nights / "bench.toml", "--jobs", jobs,
            "--csv", csv, "--html", html,
        )  # fmt: skip
        assert ran.returncode == 0, ran.stderr
        told.append((ran.stdout, csv.read_text(), html.read_text()))
    assert told[0][0].count("c in t2") == 1
    assert told[1] == told[0]


def test_minutes_of_several_runs_are_in_order(nights: Path, tmp_path: Path) -> None:
    csv = tmp_path / "minutes.csv"
    ran = stillbrine("report", nights, "--bench", nights / "bench.toml", "--csv", csv)
    assert ran.returncode == 0, ran.stderr
    header, *rows = [line.split(",") for line in csv.read_text().splitlines()]
    mine = [row[0] for row in rows if "a" in row[: len(header)]]
    assert len(mine) > 100
    assert mine == sorted(mine)


def test_what_is_wrong_with_one_of_them_is_one_line(nights: Path, tmp_path: Path) -> None:
    (tmp_path / "empty").mkdir()
    ran = stillbrine("replay", tmp_path / "empty", "--findings")
    assert (ran.returncode, ran.stdout) == (2, "")
    assert ran.stderr.endswith("no log in this folder; expected NAME.log or NAME.log.gz\n")
    other = tmp_path / "d.log"
    night(other, rate_hz=1.0, hours=0.1, doses=0)
    for args in (["--bench", str(nights / "bench.toml")], []):
        ran = stillbrine("replay", nights, other, "--findings", "--jobs", "2", *args)
        assert (ran.returncode, ran.stdout) == (2, "")
        assert len(ran.stderr.splitlines()) == 1, ran.stderr


@pytest.mark.parametrize("address", ["nowhere", "tcp://127.0.0.1:9"])
def test_a_scheduler_that_is_not_there_is_one_line(nights: Path, address: str) -> None:
    pytest.importorskip("distributed", reason="distributed is not installed (extra: fleet)")
    bench = nights / "bench.toml"
    ran = stillbrine("replay", nights, "--bench", bench, "--findings", "--dask", address)
    assert (ran.returncode, ran.stdout) == (1, "")
    assert f"--dask {address}: " in ran.stderr
    assert len(ran.stderr.splitlines()) == 1, ran.stderr


@pytest.fixture
def cluster() -> Iterator[tuple[str, list[subprocess.Popen[bytes]]]]:
    """A Dask scheduler's address and its two workers, each a process of its own."""
    pytest.importorskip("distributed", reason="distributed is not installed (extra: fleet)")
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{free.getsockname()[1]}"
    dask = [sys.executable, "-m", "distributed.cli"]
    scheduler = [f"{dask[-1]}.dask_scheduler", "--host", address, "--no-dashboard"]
    worker = [
        f"{dask[-1]}.dask_worker", address, "--no-nanny", "--nthreads", "1", "--no-dashboard",
        "--host", "127.0.0.1",
    ]  # fmt: skip
    begun = [
        subprocess.Popen([*dask[:-1], *args], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        for args in (scheduler, worker, worker)
    ]
    try:
        yield address, begun[1:]
    finally:
        for process in begun:
            process.kill()
            process.wait()


def test_dask_says_the_same_though_a_worker_is_killed(
    nights: Path, cluster: tuple[str, list[subprocess.Popen[bytes]]]
) -> None:
    distributed: Any = pytest.importorskip("distributed")
    address, workers = cluster
    with distributed.Client(address, timeout=60) as client:
        client.wait_for_workers(2, timeout=60)
    paths = [str(path) for path in sorted(nights.glob("*.log"))]
    bench = load_bench(nights / "bench.toml")
    killed: list[int] = []

    def kill_one(done: int, total: int) -> None:
        """At the first answer: others are being judged just now."""
        if not killed:
            assert done < total
            workers[0].kill()
            killed.append(workers[0].wait())

    by_dask = judge_logs(paths, bench, dask=address, progress=kill_one)
    assert killed == [-signal.SIGKILL]
    assert workers[1].poll() is None
    alone = judge_logs(paths, bench)
    said = [[line(f) for batch in replay(probes) for f in batch] for probes in (by_dask, alone)]
    assert said[0] == said[1]
    assert len(said[0]) > 20
    assert [p.told for p in by_dask] == [p.told for p in alone]


def test_a_worker_that_is_killed_is_one_line(nights: Path) -> None:
    def kill_all(done: int, total: int) -> None:
        assert done < total
        for child in multiprocessing.active_children():
            child.kill()

    paths = [str(path) for path in sorted(nights.glob("*.log"))]
    bench = load_bench(nights / "bench.toml")
    with pytest.raises(ManyError, match=r"a worker process was killed.*--jobs 1"):
        judge_logs(paths, bench, jobs=2, progress=kill_all)


class Terminal(io.StringIO):
    """Standard error, where somebody looks."""

    def isatty(self) -> bool:
        return True


@pytest.mark.parametrize("terminal", [True, False])
@pytest.mark.parametrize("waited_s", [0.5, 2.0])
def test_a_bar_for_what_takes_long_on_a_terminal(
    monkeypatch: pytest.MonkeyPatch, terminal: bool, waited_s: float
) -> None:
    now_s = [100.0]
    stream = Terminal() if terminal else io.StringIO()
    monkeypatch.setattr("sys.stderr", stream)
    monkeypatch.setattr("time.monotonic", lambda: now_s[0])
    bar = Bar("judging 4 logs")
    now_s[0] += waited_s
    bar(250, 1000)
    bar.clear()
    shown = "\rjudging 4 logs [########----------------------]  25%\r\x1b[K"
    assert stream.getvalue() == (shown if terminal and waited_s > 1.0 else "")

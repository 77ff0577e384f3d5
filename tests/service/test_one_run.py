"""One run with everything in it: what was said live is what any replay says.

Silence, a lost port, a late dose, a strike, a changed bench file, midnight, a kill and a restart;
replayed whole, by each file, with and without a bench from outside, cut anywhere.
"""

from __future__ import annotations

import random
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest

from drivers.line import Decoder
from drivers.virtual_tank import bench_text
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank
from monitor.bench import Bench, parse
from monitor.findings import Finding, line
from monitor.follow import Follower
from monitor.logbook.writer import LogWriter
from monitor.recorder import Recorder
from monitor.replay import open_logs, replay
from monitor.runs import carried_by_last_run, head_of
from tests.service.hand import HandClock

RATE_HZ = 4.0


@dataclass
class Night:
    """A probe in a tank, and the recorder on it, second by second."""

    folder: Path
    clock: HandClock
    bench: Bench
    probe: Probe
    tank: Tank
    said: list[list[Finding]] = field(default_factory=list)
    recorder: Recorder | None = None
    _sent: int = 0

    def start(self) -> None:
        """A run begins."""
        started = self.clock.utc()
        said: list[Finding] = []
        self.said.append(said)
        carried = carried_by_last_run(self.folder, "p1", started, self.bench)
        self.recorder = Recorder(
            "p1",
            Decoder(self.bench.probe["p1"]),
            LogWriter(self.folder, "p1", started, f"run{len(self.said)}"),
            Follower("p1"),
            self.clock,
            self.clock.s,
            said.extend,
            lambda text: None,
        )
        self.recorder.begin(head_of(self.bench, "p1"), carried)
        self.recorder.link(True)

    def on(self, seconds: float, silent: bool = False) -> None:
        """Time passes."""
        assert self.recorder is not None
        for _ in range(int(seconds)):
            day = self.clock.utc().date()
            for _ in range(int(RATE_HZ)):
                self.clock.s += 1.0 / RATE_HZ
                readings = self.probe.read(self._sent, self._sent + 1)
                self._sent += 1
                if not silent:
                    for period, temp in zip(readings.period_us, readings.temp_c):
                        text = f"{period:.10g},{temp:.2f}\n".encode()
                        self.recorder.on_bytes(text, self.clock.s)
            if self.clock.utc().date() > day:
                self.recorder.next_part()
            self.recorder.tick()

    def dose(self, volume_ml: float, told_late_s: float = 0.0, id_: str = "") -> None:
        """Pour, and record it."""
        assert self.recorder is not None
        self.tank.pour(self.clock.s, 0.15, volume_ml, 8.0)
        poured_s = self.clock.s
        self.on(told_late_s)
        fields = {"tank": "t1", "liquid": "saline", "volume_ml": volume_ml, "open_s": 8.0}
        ago = self.clock.s - poured_s
        assert self.recorder.event("dose", {**fields, "id": id_}, self.recorder.run_s - ago)


def everything(folder: Path) -> Night:
    """The run: two parts, a kill, a second run."""
    rng = np.random.default_rng(5)
    tank = Tank(0.08, 1200.0, Mixing(tau_s=9.0), rng)
    probe = Probe(tank, Climate(24.5), rng, Circuit(), tick_us=0.5, rate_hz=RATE_HZ)
    text = (
        bench_text.probe_text("p1", "t1", probe, rng)
        + bench_text.tank_text("t1", 1200.0, "grows", 0.001)
        + bench_text.liquids_text({"saline": (0.15, 0.0005)})
    )
    clock = HandClock(datetime(2026, 3, 14, 23, 35, tzinfo=UTC))
    night = Night(folder, clock, parse(text), probe, tank)
    night.start()
    night.on(120)
    night.dose(40.0, id_="a")
    night.on(150)
    night.on(30, silent=True)
    night.on(60)
    assert night.recorder is not None
    night.recorder.link(False)
    night.on(90, silent=True)
    night.recorder.link(True)
    night.on(60)
    night.dose(40.0, told_late_s=45, id_="b")
    night.on(120)
    night.dose(50.0, id_="c")
    night.on(12)
    night.recorder.event("strike", {"tank": "t1", "of": "c", "id": "d"})
    night.on(150)
    changed = text.replace("rest_band_pct = 0.001", "rest_band_pct = 0.0012")
    night.bench = parse(changed)
    night.recorder.change(head_of(night.bench, "p1"))
    night.on(120)
    night.dose(30.0, id_="e")
    night.on(800)  # over midnight
    night.dose(30.0, id_="f")
    night.on(20)
    _kill(night)
    clock.s += 40.0
    night._sent += int(40 * RATE_HZ)
    night.start()
    night.on(400)
    night.recorder.end()
    return night


def _kill(night: Night) -> None:
    """As kill -9 leaves it: half a line, no `end`."""
    assert night.recorder is not None
    night.recorder.flush()
    with night.recorder.writer.path.open("ab") as file:
        file.write(b"1517.250,51")


@pytest.fixture(scope="module")
def night(tmp_path_factory: pytest.TempPathFactory) -> Night:
    return everything(tmp_path_factory.mktemp("logs"))


@pytest.fixture(scope="module")
def logs(night: Night) -> list[Path]:
    return sorted(night.folder.glob("*.log"))


def told(paths: list[Path], given: Bench | None = None) -> list[str]:
    probes = open_logs([str(path) for path in paths], given)
    return [line(f) for batch in replay(probes) for f in batch if f["finding"] != "unwatched"]


def test_everything_happened(night: Night, logs: list[Path]) -> None:
    assert len(logs) == 3
    kinds = {(f["finding"], f.get("fault"), f.get("verdict")) for run in night.said for f in run}
    assert ("fault", "no-pulses", None) in kinds
    assert ("rest", None, "agrees") in kinds
    doses = {f.get("dose_t") for f in night.said[0] if f["finding"] == "rest"}
    assert len(doses - {None}) >= 3


def test_each_run_replays_as_it_was_said(night: Night, logs: list[Path]) -> None:
    assert told(logs[:2]) == [line(f) for f in night.said[0]]
    assert told(logs[2:]) == [line(f) for f in night.said[1]]


def test_both_runs_together_are_the_first_and_then_the_second(
    night: Night, logs: list[Path]
) -> None:
    first = [line(f) for f in night.said[0]]
    whole = told(logs)
    assert whole[: len(first)] == first
    assert len(whole) == len(first) + len(night.said[1])


def test_the_second_run_knows_the_dose_of_the_first(night: Night) -> None:
    rests = [f for f in night.said[1] if f["finding"] == "rest" and f["dose_t"] is not None]
    assert rests
    assert rests[0]["dose_t"] < 0
    assert rests[0]["verdict"] == "agrees"


def test_a_later_part_alone_is_near(night: Night, logs: list[Path]) -> None:
    alone = told(logs[1:2])
    began_s = 25 * 60
    doses = {f["dose_t"] for f in night.said[0] if f["finding"] == "outlook" and f["t"] > began_s}
    assert all(any(f'"dose_t": {round(dose, 3)}' in each for each in alone) for dose in doses)


def test_a_bench_from_outside_judges_the_whole_run(night: Night, logs: list[Path]) -> None:
    by_last = told(logs[:2], night.bench)
    said = [line(f) for f in night.said[0]]
    assert by_last != said  # the band was another at first
    assert {each.split('"finding": ')[1].split(",")[0] for each in by_last} >= {'"rest"', '"fault"'}


def _pieces(data: bytes, rng: random.Random) -> Iterator[bytes]:
    at = 0
    while at < len(data):
        size = rng.choice([1, 7, 40, 300, 5000])
        yield data[at : at + size]
        at += size


@pytest.mark.parametrize("seed", range(3))
def test_any_cut_into_pieces_says_the_same(night: Night, logs: list[Path], seed: int) -> None:
    rng = random.Random(seed)
    follower = Follower("p1")
    said: list[Finding] = []
    for path in logs[:2]:
        for piece in _pieces(path.read_bytes(), rng):
            said += follower.feed(piece)
        said += follower.next_part()
    assert [line(f) for f in said] == [line(f) for f in night.said[0]]


@pytest.mark.parametrize("share", [0.2, 0.47, 0.8])
def test_a_log_cut_short_says_what_was_known_then(
    night: Night, logs: list[Path], share: float, tmp_path: Path
) -> None:
    data = logs[0].read_bytes()
    short = tmp_path / logs[0].name
    short.write_bytes(data[: data.index(b"\n", int(share * len(data))) + 1])
    said = told([short])
    assert said == [line(f) for f in night.said[0]][: len(said)]
    assert said

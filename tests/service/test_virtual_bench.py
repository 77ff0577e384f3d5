"""The virtual bench behind real pseudo-terminals, read through the real serial driver."""

from __future__ import annotations

import asyncio
import contextlib
import os
import subprocess
import sys
import time
from collections.abc import AsyncIterator, Callable, Coroutine, Iterator
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from drivers.line import Decoder
from drivers.serial_port import SerialPort
from drivers.virtual_tank import demo
from drivers.virtual_tank.bench import Act, VirtualBench
from drivers.virtual_tank.line_out import shelf
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank
from monitor import bench as bench_file

LIQUIDS = {"saline": 0.15, "deionised": 0.0}


class FastClock:
    """The host's clock, faster."""

    def __init__(self, speed: float) -> None:
        self.speed = speed
        self._zero = time.monotonic()

    def now_s(self) -> float:
        return (time.monotonic() - self._zero) * self.speed


class Reader:
    """Rows of a probe with the bench's time, read as a real probe would be."""

    def __init__(self, path: str, clock: FastClock) -> None:
        self.rows: list[tuple[float, float]] = []
        self.down: list[str] = []
        self.decoder = Decoder(SimpleNamespace(period_unit="us", tick_hz=None))
        self._port = SerialPort(path, 115200, self._heard, lambda: None, self.down.append, clock)

    def _heard(self, data: bytes, stamp: float) -> None:
        self.rows += [(stamp, float(r.period_us)) for r in self.decoder.feed(data, stamp)]

    def periods(self, from_s: float, to_s: float) -> list[float]:
        return [period for t, period in self.rows if from_s <= t < to_s]

    async def run(self) -> None:
        await self._port.run()


@pytest.fixture
def folder() -> Iterator[Path]:
    made = shelf(f"bench-test-{os.getpid()}")
    if made is None:
        pytest.skip("no /dev/shm here, so no device name that outlives its device")
    yield made
    made.rmdir()


def hung(clock: FastClock, folder: Path) -> tuple[VirtualBench, str]:
    bench = VirtualBench(clock, LIQUIDS)
    rng = np.random.default_rng(1)
    bench.tanks["t1"] = Tank(0.08, 1200.0, Mixing(tau_s=3.0, delay_s=1.0), rng)
    probe = Probe(bench.tanks["t1"], Climate(25.0), rng, Circuit(15.0, 900.0), white=0.001)
    return bench, bench.hang("p1", probe, folder)


@contextlib.asynccontextmanager
async def running(*works: Callable[[], Coroutine[None, None, None]]) -> AsyncIterator[None]:
    tasks = [asyncio.create_task(work()) for work in works]
    try:
        yield
    finally:
        for task in tasks:
            task.cancel()
        await asyncio.gather(*tasks, return_exceptions=True)


async def passed(bench: VirtualBench, until_s: float) -> None:
    async with asyncio.timeout(20):
        while bench.time_s < until_s:
            await asyncio.sleep(0.01)


async def test_dose_and_fault_act_while_it_runs(folder: Path) -> None:
    clock = FastClock(20.0)
    bench, path = hung(clock, folder)
    reader = Reader(path, clock)
    async with running(bench.run, reader.run):
        await passed(bench, 8.0)
        poured_s = bench.time_s
        pour = bench.dose("t1", "saline", 200.0, 4.0)
        await passed(bench, poured_s + 40.0)
        broken_s = bench.time_s
        bench.fault("p1", "no-pulses", 5.0, style="zeros")
        await passed(bench, broken_s + 12.0)
    before = np.mean(reader.periods(2.0, poured_s))
    after = np.mean(reader.periods(poured_s + 30.0, broken_s))
    circuit = Circuit(15.0, 900.0)
    water = np.array([0.08, pour.final_pct])
    assert [before, after] == pytest.approx(circuit.period_us(water, np.full(2, 25.0)), rel=2e-3)
    assert set(reader.periods(broken_s + 2.0, broken_s + 4.0)) == {0.0}
    assert min(reader.periods(broken_s + 7.0, 1e9)) > 0
    assert reader.decoder.counts.total() == 0
    times = [t for t, _ in reader.rows]
    assert len(times) / (times[-1] - times[0]) == pytest.approx(5.0, rel=0.1)


async def test_unplugged_and_back_on_the_same_path(folder: Path) -> None:
    clock = FastClock(20.0)
    bench, path = hung(clock, folder)
    reader = Reader(path, clock)
    async with running(bench.run, reader.run):
        for i in range(10):
            rows = len(reader.rows)
            async with asyncio.timeout(10):
                while len(reader.rows) < rows + 5:
                    await asyncio.sleep(0.01)
                bench.unplug("p1")
                while sum("unplugged" in why for why in reader.down) < i + 1:
                    await asyncio.sleep(0.01)
            bench.plug("p1")
    assert not Path(path).exists()


async def test_nobody_reads_and_it_goes_on(folder: Path) -> None:
    clock = FastClock(900.0)
    bench, path = hung(clock, folder)
    async with running(bench.run):
        await passed(bench, 900.0)  # 50 kB, more than any pseudo-terminal keeps
        reader = Reader(path, clock)
        async with running(reader.run):
            await passed(bench, bench.time_s + 100.0)
    assert len(reader.rows) > 100


async def test_schedule_is_carried_out_and_told(folder: Path) -> None:
    clock = FastClock(50.0)
    bench, _ = hung(clock, folder)
    told: list[tuple[float, Act]] = []
    acts = [
        Act(20.0, "fault", "p1", {"fault": "bubbles", "lasts_s": 9.0}),
        Act(10.0, "dose", "t1", {"liquid": "saline", "volume_ml": 50.0, "open_s": 3.0}),
        Act(22.0, "unplug", "p1"),
        Act(24.0, "plug", "p1"),
    ]
    async with running(bench.run):
        await bench.play(acts, lambda act: told.append((bench.time_s, act)))
        assert len(bench.tanks["t1"].pours) == 1
    assert [act.what for _, act in told] == ["dose", "fault", "unplug", "plug"]
    assert all(act.at_s <= t < act.at_s + 5.0 for t, act in told)


async def test_demo_bench_file_checks_and_its_probes_speak(folder: Path) -> None:
    clock = FastClock(5.0)
    bench, text = demo.build(clock, folder)
    settings = bench_file.parse(text)
    ports = [probe.port for probe in settings.probe.values() if probe.port]
    readers = [Reader(port, clock) for port in ports]
    async with running(bench.run, *(reader.run for reader in readers)):
        await passed(bench, 8.0)
    assert len(ports) == 3
    assert all(len(reader.rows) > 10 for reader in readers)
    names = {*settings.probe, *settings.tank}
    assert all(act.where in names for act in demo.ACTS)
    assert {a.figures["liquid"] for a in demo.ACTS if a.what == "dose"} <= set(settings.liquid)


def test_command_serves_a_bench_file_and_takes_orders(tmp_path: Path) -> None:
    file = tmp_path / "bench.toml"
    file.write_text(
        '[probe.p1]\ntank = "t1"\n[tank.t1]\nrest_band_pct = 0.001\n[liquid.saline]\n'
        "salinity_pct = 0.15\n"
    )
    command = [sys.executable, "-m", "drivers.virtual_tank", "--bench", str(file), "--speed", "20"]
    with subprocess.Popen(
        command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as served:
        assert served.stdin
        assert served.stdout
        said = served.stdout.readline()
        port = said.split('"')[1]
        assert said == f'[probe.p1] port = "{port}"\n'
        assert Path(port).exists()
        answers = []
        for order in ("dose t1 saline 50 5", "dose t1 saline nan", "fault p1 gremlins", "dance"):
            served.stdin.write(order + "\n")
            served.stdin.flush()
            answers.append(served.stdout.readline())
        served.terminate()
        assert served.wait(10) == 0
    assert answers[0].startswith("done at ")
    assert "expected a number" in answers[1]
    assert "no fault 'gremlins'" in answers[2]
    assert "not understood" in answers[3]
    assert not Path(port).exists()


def test_command_refuses_what_is_no_bench_file_in_one_line(tmp_path: Path) -> None:
    file = tmp_path / "bench.toml"
    file.write_text("[probe.p1]\ntank = 3\n")
    command = [sys.executable, "-m", "drivers.virtual_tank", "--bench", str(file)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=30, check=False)
    assert done.returncode == 2
    assert done.stdout == ""
    assert len(done.stderr.splitlines()) == 1

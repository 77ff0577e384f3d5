"""Measure and print one table: `python -m tests.speed [--quick] [--json FILE]`.

Figures in seconds are this machine's, at this hour; ratios, both sides measured in turn, are what
can be compared. Processor time is what counts where other work shares the machine.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import shutil
import subprocess
import sys
import tempfile
from dataclasses import asdict
from pathlib import Path
from typing import Any

from tests.speed.logs import night
from tests.speed.measure import ROOT, Cost, alternated, line, run, shown, stillbrine
from tests.speed.stages import costs_us

ROWS = (10_000, 100_000, 1_000_000, 4_320_000)
LOGS = (1, 2, 4, 8, 16)
LIVE = [
    *(["-m", "tests.speed.ingest", ports, "2304", "20"] for ports in ("1", "4", "16")),
    ["-m", "tests.screen.pace", "--probes", "16", "--rate", "100"],
    ["-m", "tests.screen.pace", "--probes", "64", "--rate", "10"],
]
Figure = dict[str, Any]


class Bench:
    """Measures in one folder; `rounds` of each comparison."""

    def __init__(self, folder: Path, rounds: int, quick: bool) -> None:
        self.folder, self.rounds, self.quick = folder, rounds, quick
        self.rows = ROWS[:3] if quick else ROWS
        self.logs = LOGS[:3] if quick else LOGS
        self.figures: list[Figure] = []

    def log(self, rows: int, rate_hz: float, name: str = "log", doses: int = 6) -> list[str]:
        """A replay of a log of so many rows, as arguments."""
        path = self.folder / f"{name}-{rows}-{rate_hz:g}hz.log"
        bench = path.with_suffix(".bench.toml")
        if not path.exists():
            night(path, rate_hz, rows / rate_hz / 3600.0, doses if rows > 60_000 else 0)
        return stillbrine("replay", path, "--bench", bench, "--findings")

    def told(self, what: str, args: list[str], cost: Cost, **more: Any) -> None:
        """Keep and print one figure."""
        figure = {"what": what, "command": shown(args), **asdict(cost), **more}
        self.figures.append(figure)
        extra = "".join(f", {key} {_short(value)}" for key, value in more.items())
        print(
            f"{what:28s} {cost.wall_s:7.3f} s wall {cost.cpu_s:7.3f} s cpu {cost.peak_mib:5.0f}"
            f" MiB{extra}\n    {figure['command']}",
            flush=True,
        )

    def against_the_script(self) -> None:
        """The whole chain beside what only reads and filters."""
        rows = self.rows[-1]
        ours = self.log(rows, 100.0)
        script = ["-m", "tests.speed.script", ours[3]]
        replay, pandas = alternated([ours, script], self.rounds)
        self.told("pandas script", script, pandas, rows_per_cpu_s=rows / pandas.cpu_s)
        self.told(
            "replay, whole chain",
            ours,
            replay,
            rows_per_cpu_s=rows / replay.cpu_s,
            ratio_cpu=pandas.cpu_s / replay.cpu_s,
            ratio_wall=pandas.wall_s / replay.wall_s,
            memory_share=replay.peak_mib / pandas.peak_mib,
        )

    def a_night(self) -> None:
        """12 h at 10 readings a second, with an empty Python to compare machines by."""
        args, bare = self.log(432_000, 10.0), ["-c", "pass"]
        cost, python = alternated([args, bare], self.rounds)
        self.told("python that does nothing", bare, python)
        self.told("night of 12 h at 10/s", args, cost, bare_pythons=cost.cpu_s / python.cpu_s)

    def stages(self) -> None:
        """Each stage of the chain, on the seconds of that night."""
        args = self.log(432_000, 10.0)
        costs = costs_us(Path(args[3]), Path(args[5]), 3)
        self.figures.append({"what": "stages, us a second of log", **costs})
        print("stages, us of cpu a second of log at 10/s: ", end="")
        print(", ".join(f"{name} {each:.2f}" for name, each in costs.items()), flush=True)

    def growth_with_rows(self) -> None:
        """Replays of logs at 100 readings a second, ever longer."""
        commands = [self.log(rows, 100.0) for rows in self.rows]
        costs = alternated(commands, self.rounds)
        for rows, args, cost in zip(self.rows, commands, costs):
            self.told(f"{rows} rows", args, cost)
        self._fit("row", self.rows, costs)

    def growth_with_logs(self) -> None:
        """Ever more probes of half an hour and three hours' rows, on one core."""
        commands = []
        for n in self.logs:
            folder = self.folder / f"logs-{n}"
            folder.mkdir(exist_ok=True)
            tables: dict[str, str] = {}
            for i in range(n):
                bench = night(folder / f"p{i}.log", 10.0, 2.0, 1, seed=i).read_text()
                own, _, rest = bench.partition("[tank.t1]")
                tables[f"p{i}"] = (
                    own.replace('"t1"', f'"t{i}"')
                    + f"[tank.t{i}]"
                    + (rest if not i else rest.partition("[liquid")[0])
                )
            (folder / "bench.toml").write_text("".join(tables.values()))
            commands.append(
                stillbrine("replay", folder, "--bench", folder / "bench.toml", "--findings")
                + ["--jobs", "1"]
            )
        costs = alternated(commands, self.rounds)
        for n, args, cost in zip(self.logs, commands, costs):
            self.told(f"{n} logs of 72000 rows", args, cost)
        self._fit("log", self.logs, costs)
        cores = [*commands[-1][:-1], str(os.cpu_count())]
        self.told("the last one, all cores", cores, run(cores))

    def _fit(self, each: str, sizes: tuple[int, ...], costs: list[Cost]) -> None:
        fixed_s, each_s, off = line(sizes, [cost.cpu_s for cost in costs])
        self.figures.append(
            {"what": f"growth by {each}", "fixed_s": fixed_s, "each_s": each_s, "off_most": off}
        )
        print(
            f"cpu = {fixed_s:.3f} s + {each_s:.4g} s a {each}; farthest from it {off:.1%}",
            flush=True,
        )

    def starts(self) -> None:
        """From the prompt to the answer."""
        bench = self.log(10_000, 100.0)[5]
        probe = Path(bench).name.removesuffix(".bench.toml")
        probe = probe.replace(".", "-")
        commands = {
            "python that does nothing": ["-c", "pass"],
            "--help": stillbrine("--help"),
            "salinity": stillbrine("salinity", "--bench", bench, "--probe", probe, "585.5"),
            "a replay of 10000 rows": self.log(10_000, 100.0),
        }
        costs = alternated(list(commands.values()), 2 * self.rounds)
        for (what, args), cost in zip(commands.items(), costs):
            self.told(f"start: {what}", args, cost)

    def live(self) -> None:
        """The service and the screen, by the commands that measure them."""
        for args in LIVE[:1] if self.quick else LIVE:
            ran = subprocess.run(
                [sys.executable, *args], cwd=ROOT, capture_output=True, text=True, timeout=600
            )
            said = (ran.stdout if ran.returncode == 0 else ran.stderr).strip()
            if ran.returncode:
                said = f"failed: {said.splitlines()[-1] if said else ran.returncode}"
            self.figures.append({"what": "live", "command": shown(args), "said": said})
            print(f"{shown(args)}\n    {said}", flush=True)


def _short(value: Any) -> str:
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def main() -> None:
    """Measure all, or what is named."""
    parts = ("against_the_script", "a_night", "stages", "growth_with_rows", "growth_with_logs",
             "starts", "live")  # fmt: skip
    ask = argparse.ArgumentParser(description=__doc__, prog="python -m tests.speed")
    ask.add_argument("part", nargs="*", choices=[*parts, []], help="else all of them")
    ask.add_argument("--rounds", type=int, default=5)
    ask.add_argument("--quick", action="store_true", help="one round, and no log over 1e6 rows")
    ask.add_argument("--json", type=Path, default=Path(tempfile.gettempdir(), "speed.json"))
    given = ask.parse_args()
    folder = Path(tempfile.mkdtemp(prefix="stillbrine-speed-"))
    machine = {
        "python": platform.python_version(),
        "machine": platform.machine(),
        "cores": os.cpu_count(),
        "load": os.getloadavg()[0],
    }
    print(f"{machine}", flush=True)
    bench = Bench(folder, 1 if given.quick else given.rounds, given.quick)
    try:
        for part in given.part or parts:
            getattr(bench, part)()
    finally:
        shutil.rmtree(folder)
    text = json.dumps({"machine": machine, "figures": bench.figures}, indent=1)
    given.json.write_text(text + "\n")
    print(f"written: {given.json}")


if __name__ == "__main__":
    main()

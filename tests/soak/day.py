"""A working day on two tanks, twelve hours in a minute: `python -m tests.soak.day FOLDER`.

Three wipes (one unmarked), a calibration, two water changes, four doses of which one is not
recorded and one entered twice, two probes swapped at a replug and put back, a machine asleep for
40 min across midnight, the bench file edited twice (once wrongly). Writes the logs, the bench file
and the truth; prints the report of the day and what is open at its end.
"""

from __future__ import annotations

import json
import sys
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from drivers.virtual_tank import bench_text
from drivers.virtual_tank.mixing import Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe
from drivers.virtual_tank.tank import Tank
from monitor.bench import BenchError, parse
from monitor.findings import line
from monitor.runs import head_of
from tests.service.hand import HandBench, HandClock

START = datetime(2026, 3, 14, 14, 0, tzinfo=UTC)
LIQUIDS = {"saline": (0.15, 0.0005), "deionised": (0.0, 0.0001)}


class Day:
    """The day's script, hour by hour."""

    def __init__(self, folder: Path) -> None:
        rng = np.random.default_rng(12)
        self.tanks = {
            "t1": Tank(0.085, 1200.0, Mixing(tau_s=8.0), rng),
            "t2": Tank(0.06, 2500.0, Mixing(tau_s=14.0), rng),
        }
        probes = {
            "p1": Probe(self.tanks["t1"], Climate(24.6), rng, Circuit(), tick_us=0.5, rate_hz=1.0),
            "p2": Probe(
                self.tanks["t2"], Climate(24.4), rng, Circuit(14.0, 780.0), tick_us=0.5, rate_hz=1.0
            ),
        }
        self.text = "".join(
            bench_text.probe_text(name, f"t{name[1]}", probe, rng) for name, probe in probes.items()
        )
        self.text += bench_text.tank_text("t1", 1200.0, "grows", 0.001)
        self.text += bench_text.tank_text("t2", 2500.0, "grows", 0.001)
        self.text += bench_text.liquids_text(LIQUIDS)
        self.at_home = dict(probes)
        self.bench = HandBench(folder, HandClock(START), parse(self.text), probes)
        self.truth: list[dict[str, Any]] = []

    def at(self, hours: float) -> None:
        """Go on until so many hours after the start."""
        self.bench.on(round(hours * 3600 - self.bench.clock.s))

    def note(self, what: str, **more: Any) -> None:
        """Put down what really happened."""
        self.truth.append({"t": round(self.bench.clock.s, 3), "what": what, **more})

    def tell(self, probe: str, kind: str, ago_s: float = 0.0, **fields: Any) -> None:
        """A person's order."""
        recorder = self.bench.recorders[probe]
        when = recorder.run_s - ago_s if ago_s else None
        assert recorder.event(kind, {**fields, "by": "ab"}, when)

    def dose(self, tank: str, ml: float, ids: tuple[str, ...], open_s: float = 8.0) -> None:
        """Pour; recorded as often as there are ids."""
        self.bench.on(1)
        self.tanks[tank].pour(self.bench.clock.s, 0.15, ml, open_s)
        self.note("dose", tank=tank, ml=ml, recorded=len(ids))
        for id_ in ids:
            fields: dict[str, Any] = {
                "tank": tank,
                "liquid": "saline",
                "volume_ml": ml,
                "open_s": open_s,
            }
            self.tell(f"p{tank[1]}", "dose", **fields, id=id_)
            self.bench.on(20)

    def wipe(self, probe: str, marked: bool) -> None:
        """Out, into rinse water, wiped, back."""
        self.note("wipe", probe=probe, marked=marked)
        if marked:
            self.tell(probe, "out", why="wipe")
        self.bench.shut.add(probe)
        self.bench.on(25)
        self.bench.shut.discard(probe)
        self.bench.rinsed[probe] = 0.006
        self.bench.on(60)
        self.bench.rinsed.pop(probe)
        if marked:
            self.bench.on(5)
            self.tell(probe, "back")

    def calibrate(self, probe: str) -> None:
        """Out, standard after standard, a new set into the bench file, back."""
        self.note("calibration", probe=probe)
        self.tell(probe, "out", why="standard")
        for pct in (0.025, 0.075, 0.125):
            self.bench.rinsed[probe] = pct
            self.bench.on(90)
        self.bench.rinsed.pop(probe)
        again = bench_text.probe_text("p1", "t1", self.at_home[probe], np.random.default_rng(4))
        sets = again[again.index("[[") :].replace("temp_c", 'set = "again"\ntemp_c')
        self.edit(self.text.replace("[probe.p2]", f"{sets}[probe.p2]", 1))
        self.bench.on(10)
        self.tell(probe, "back")

    def edit(self, text: str) -> None:
        """The bench file is edited, and taken if it checks."""
        try:
            new = parse(text)
        except BenchError:
            self.note("bench edited wrongly")
            return
        self.note("bench edited")
        for name, recorder in self.bench.recorders.items():
            settings = head_of(new, name)
            if settings != recorder.settings:
                recorder.change(settings)
        self.bench.bench, self.text = new, text

    def change_water(self, tank: str, ml: float) -> None:
        """Siphon off and fill up with deionised water; recorded as water, not as a dose."""
        self.note("water", tank=tank, ml=ml)
        self.tanks[tank].pour(self.bench.clock.s, 0.0, ml, 20.0)
        self.bench.on(5)
        volume = self.tanks[tank].volume_ml
        self.tell(f"p{tank[1]}", "water", tank=tank, volume_ml=volume, u_ml=8.0, id=f"w{tank}")

    def swap(self) -> None:
        """Both leads pulled, and put into each other's port."""
        self.note("plugs exchanged")
        self.bench.each(lambda recorder: recorder.link(False))
        self.bench.shut |= {"p1", "p2"}
        self.bench.on(40)
        probes = self.bench.probes
        probes["p1"], probes["p2"] = probes["p2"], probes["p1"]
        self.bench.shut.clear()
        self.bench.each(lambda recorder: recorder.link(True))

    def answer(self) -> None:
        """A person answers what is asked about the probes."""
        for name in self.bench.recorders:
            self.tell(name, "answer", of="other-probe", answer="plugs exchanged")

    def run(self) -> HandBench:
        """The day."""
        self.bench.start()
        self.at(0.3)
        self.dose("t1", 40.0, ("d1",))
        self.at(1.0)
        self.wipe("p1", marked=True)
        self.at(1.5)
        self.dose("t2", 150.0, ())
        self.at(2.0)
        self.calibrate("p1")
        self.at(3.0)
        self.change_water("t1", 150.0)
        self.at(4.0)
        self.dose("t1", 60.0, ("d3", "d4"))
        self.bench.on(60)
        self.tell("p1", "strike", tank="t1", of="d4", why="entered twice", id="s1")
        self.at(5.0)
        self.wipe("p2", marked=True)
        self.at(6.0)
        self.edit(self.text.replace("rest_band_pct", "rest_bnad_pct", 1))
        self.at(7.0)
        self.wipe("p1", marked=False)
        self.at(8.0)
        self.dose("t2", 80.0, ("d5",))
        self.at(9.6)
        self.note("asleep", for_s=2400)
        self.bench.sleep(2400)
        self.at(10.8)
        self.swap()
        self.bench.on(300)
        self.answer()
        self.swap()
        self.bench.on(300)
        self.answer()
        self.at(11.3)
        self.change_water("t2", 200.0)
        self.at(12.0)
        self.bench.end()
        return self.bench


def main(folder: Path) -> None:
    from monitor.report.digest import handover
    from monitor.report.night import gather
    from monitor.report.pages import text

    folder.mkdir(parents=True, exist_ok=True)
    day = Day(folder)
    (folder / "day.bench.toml").write_text(day.text)
    bench = day.run()
    (folder / "day.truth.json").write_text(json.dumps({"happened": day.truth}, indent=1))
    (folder / "day.findings.jsonl").write_text("".join(line(f) + "\n" for f in bench.said))
    night = gather([str(path) for path in sorted(folder.glob("*.log"))])
    print(text(night), text(night, told=handover(night), title="Hand-over"), sep="\n")


if __name__ == "__main__":
    main(Path(sys.argv[1]))

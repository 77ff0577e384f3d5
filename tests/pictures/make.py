"""Make the README's pictures from recorded logs: `python -m tests.pictures.make [FOLDER]`.

Three logs of `replay_logs/` are played beside one another as if they had been one bench: the tanks'
names and aims are given here and invented. What is seen in the pictures is what the judges make of
the logs today.
"""

from __future__ import annotations

import asyncio
import gzip
import re
import sys
import tempfile
from datetime import timedelta
from pathlib import Path

from monitor.bench import Bench, parse
from monitor.screen.app import Screen
from monitor.screen.replayed import ReplaySource
from tests.screen.pictured import normal

LOGS = Path(__file__).parents[2] / "replay_logs"
HERE = Path(__file__).parent
TANKS = (  # log, started, label, aim
    ("dose-loop-03", "18:00:00", "north tank (invented)", (0.08, 0.105)),
    ("bubbles-001", "17:56:00", "south tank (invented)", None),
    ("dose-stirred-01", "18:00:00", "seedlings (invented)", (0.055, 0.07)),
)
ZERO_S = 240.0  # from the earliest start to the two doses' logs
PICTURES = (  # name, width, height, time, keys, light
    ("landing", 110, 34, 132.0, (), False),
    ("bubbles", 110, 34, 170.0, ("down",), False),
    ("rest-light", 110, 34, 215.0, (), True),
    ("dose", 110, 34, 215.0, ("down", "down", "d", "tab", "6", "0"), False),
    ("small", 40, 12, 132.0, (), False),
)


def bench_and_logs(folder: Path) -> tuple[Bench, list[str]]:
    """The three logs as probes p1 to p3 of one bench, written below `folder`."""
    text, paths = "", []
    for i, (name, started, label, aim) in enumerate(TANKS, 1):
        with gzip.open(LOGS / f"{name}.log.gz", "rt", errors="replace") as log:
            rows = log.read().replace("# probe: p1", f"# probe: p{i}", 1)
        rows = re.sub(r"(# started: \S+T)[\d:.]+Z", rf"\g<1>{started}Z", rows, count=1)
        path = folder / f"p{i}.log"
        path.write_text(rows.replace('"tank": "t1"', f'"tank": "t{i}"'))
        paths.append(str(path))
        own = (LOGS / f"{name}.bench.toml").read_text()
        own = own.replace("probe.p1", f"probe.p{i}").replace('"t1"', f'"t{i}"')
        shown = f'[tank.t{i}]\nlabel = "{label}"\n'
        shown += f"aim_pct = [{aim[0]}, {aim[1]}]\n" if aim else ""
        own = own.replace("[tank.t1]\n", shown)
        text += own if i == 1 else own[: own.index("[liquid.")]
    return parse(text), paths


async def picture(
    source: ReplaySource, size: tuple[int, int], t: float, keys: tuple[str, ...], light: bool
) -> str:
    """One screen as SVG."""
    source.playing = False
    source.seek(ZERO_S + t)
    source.advance()
    app = Screen(source, light=light, zone=timedelta(hours=1), colour=True)
    async with app.run_test(size=size) as pilot:
        await pilot.press(*keys)
        await pilot.pause()
        return normal(app.export_screenshot(title="stillbrine"))


def main(folder: Path) -> None:
    """Write all pictures into this folder."""
    with tempfile.TemporaryDirectory() as made:
        bench, paths = bench_and_logs(Path(made))
        for name, width, height, t, keys, light in PICTURES:
            source = ReplaySource(paths, bench)
            svg = asyncio.run(picture(source, (width, height), t, keys, light))
            (folder / f"{name}.svg").write_text(svg)
            print(folder / f"{name}.svg")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE)

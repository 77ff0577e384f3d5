"""Folders of logs as arguments, and a bar on standard error while many of them are judged."""

from __future__ import annotations

import sys
import time
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.commands import Refusal, Wrong

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from monitor.bench import Bench
    from monitor.many import JudgedProbe, Keeper

WAIT_S = 1.0
WIDTH = 30


def logs_of(paths: Sequence[str]) -> list[str]:
    """These logs, and those in these folders by their names. Raises Wrong."""
    found: list[str] = []
    for path in paths:
        folder = Path(path)
        if not folder.is_dir():
            found.append(path)
            continue
        inside = [*folder.glob("*.log"), *folder.glob("*.log.gz")]
        if not inside:
            raise Wrong(f"{path}: no log in this folder; expected NAME.log or NAME.log.gz")
        found += sorted(str(file) for file in inside if file.is_file())
    return found


def judged(
    paths: Sequence[str],
    given: Bench | None,
    *,
    jobs: int | None = None,
    dask: str | None = None,
    keeper: Callable[[str], Keeper] | None = None,
) -> list[JudgedProbe]:
    """These logs, judged on many cores. Raises Refusal, LogError, CalibrationError."""
    from monitor.many import ManyError, judge_logs

    bar = Bar(f"judging {len(paths)} logs")
    try:
        return judge_logs(paths, given, jobs=jobs, dask=dask, keeper=keeper, progress=bar)
    except ManyError as wrong:
        raise Refusal(str(wrong)) from None
    finally:
        bar.clear()


class Bar:
    """Drawn where standard error is a terminal, and not in the first second.

    Call it with how much is done, of how much; `clear` leaves the line as it was.
    """

    def __init__(self, what: str) -> None:
        self._what = what
        self._began_s = time.monotonic()
        self._shown = False

    def __call__(self, done: int, total: int) -> None:
        if not sys.stderr.isatty() or time.monotonic() - self._began_s < WAIT_S:
            return
        share = done / total if total else 1.0
        full = round(share * WIDTH)
        bar = "#" * full + "-" * (WIDTH - full)
        print(f"\r{self._what} [{bar}] {share:4.0%}", end="", file=sys.stderr, flush=True)
        self._shown = True

    def clear(self) -> None:
        if self._shown:
            print("\r\x1b[K", end="", file=sys.stderr, flush=True)

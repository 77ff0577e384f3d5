"""Many logs at once: each run of each probe judged by itself, on any number of cores or machines.

Runs know nothing of each other but what their own `carried` says, so they may be judged anywhere
and in any order. What takes two probes is folded over their answers afterwards by the very driver
that a replay on one core uses, and the findings are the same.
"""

from __future__ import annotations

import math
import multiprocessing
import os
import signal
import socket
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from datetime import datetime
from importlib import import_module
from pathlib import Path
from typing import Any, NamedTuple, Protocol
from urllib.parse import urlsplit

from monitor.bench import Bench
from monitor.blocks import Second
from monitor.chain import Judges
from monitor.findings import Finding
from monitor.logbook.reader import Run
from monitor.replay import ProbeReplay, Told, opened
from monitor.tanks import Seen, Watched

WORTH = 16_000_000  # bytes of logs below which a second process costs more than it saves
RETRIES = 5  # of a run whose worker was lost


class ManyError(RuntimeError):
    """The logs could not be judged together; `str()` is the one line to show."""


class Keeper(Protocol):
    """Sees each judged second of one run, and is handed back: it must pickle."""

    def __call__(self, probe: str, offset: float, second: Second, judges: Judges) -> None:
        """One judged second; `offset` is to be added to its times."""

    def close(self) -> None:
        """The run is over."""


class Task(NamedTuple):
    """One run to judge."""

    probe: str
    run: Run
    zero: datetime  # where times are counted from
    given: Bench | None
    keeper: Callable[[str], Keeper] | None


class Judged(NamedTuple):
    """What came of it; times on the common zero, those of `watched` on the run's own."""

    probe: str
    tank: str
    offset: float
    closed_t: float
    watched: Watched
    findings: list[Finding]
    told: Told
    kept: Keeper | None


Progress = Callable[[int, int], None]  # bytes judged, of all


def judge(task: Task) -> Judged:
    """Judge one run, start to end. Raises LogError, CalibrationError."""
    kept = task.keeper(task.probe) if task.keeper else None
    probe = ProbeReplay(task.probe, [task.run], task.zero, task.given, kept)
    watched = probe.follower.chain.watched
    watched.minutes = deque()  # all of them: the fold over the probes comes later
    findings: list[Finding] = []
    while not probe.done:
        findings += probe.advance()
    if kept is not None:
        kept.close()
    return Judged(
        task.probe,
        probe.tank,
        probe.offset,
        probe.closed_t,
        watched,
        findings,
        probe.told,
        kept,
    )


class JudgedProbe:
    """A probe whose runs have been judged, for `replay.replay`: a run at each advance."""

    def __init__(self, probe: str, zero: datetime, runs: Sequence[Judged]) -> None:
        self.probe, self.zero = probe, zero
        self.runs = list(runs)
        self.told = Told()
        self.closed_t = -math.inf
        self._advanced = 0

    @property
    def done(self) -> bool:
        """Whether all runs have been handed on."""
        return self._advanced == len(self.runs)

    @property
    def seen(self) -> Seen:
        """For the fold over all probes: the runs handed on so far."""
        runs = self.runs[: self._advanced]
        tank = runs[-1].tank if runs else self.probe
        spans = [(run.watched, run.offset) for run in runs]
        return Seen(self.probe, tank, self.closed_t, spans, self.done)

    def advance(self) -> list[Finding]:
        """The next run's findings."""
        run = self.runs[self._advanced]
        self._advanced += 1
        self.closed_t = run.closed_t
        self.told.dropped += run.told.dropped
        self.told.messages += run.told.messages
        return run.findings


def judge_logs(
    paths: Sequence[str],
    given: Bench | None = None,
    *,
    jobs: int | None = 1,
    dask: str | None = None,
    keeper: Callable[[str], Keeper] | None = None,
    progress: Progress = lambda done, total: None,
) -> list[JudgedProbe]:
    """Judge all runs of these logs: in `jobs` processes (None: as many as are worth it), or by the
    workers of a Dask scheduler at the address `dask`, which must see the files under these paths.

    Raises LogError, CalibrationError, ManyError.
    """
    zero, runs = opened([str(Path(path).absolute()) for path in paths], given)
    tasks = [Task(run.probe, run, zero, given, keeper) for run in runs]
    sizes = [sum(part.path.stat().st_size for part in run.parts) for run in runs]
    if jobs is None:
        jobs = (os.cpu_count() or 1) if sum(sizes) >= WORTH else 1
    jobs = min(jobs, len(tasks))
    done: dict[int, Judged] = {}
    answers = _of_dask(tasks, dask) if dask else _here(tasks, sizes, jobs)
    for i, judged in answers:
        done[i] = judged
        progress(sum(sizes[j] for j in done), sum(sizes))
    its: dict[str, list[Judged]] = {}
    for i in range(len(tasks)):
        its.setdefault(tasks[i].probe, []).append(done[i])
    return [JudgedProbe(probe, zero, judged) for probe, judged in its.items()]


def _here(tasks: Sequence[Task], sizes: Sequence[int], jobs: int) -> Iterator[tuple[int, Judged]]:
    """By processes of this machine, the longest logs first."""
    if jobs <= 1:
        yield from ((i, judge(task)) for i, task in enumerate(tasks))
        return
    spawn = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(jobs, spawn, _mortal) as pool:
        order = sorted(range(len(tasks)), key=lambda i: -sizes[i])
        waiting = {pool.submit(judge, tasks[i]): i for i in order}
        try:
            for answer in as_completed(waiting):
                yield waiting[answer], answer.result()
        except BrokenProcessPool:
            raise ManyError(
                "a worker process was killed, perhaps for want of memory; expected it to live:"
                " try --jobs 1"
            ) from None
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            raise


def _mortal() -> None:
    """An interrupt at the keyboard ends a worker at once and without a word."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def _of_dask(tasks: Sequence[Task], address: str) -> Iterator[tuple[int, Judged]]:
    """By the workers of a Dask scheduler; a run whose worker is lost is judged by another."""
    try:
        distributed: Any = import_module("distributed")
    except ImportError:
        raise ManyError(
            "--dask: distributed is not installed; expected stillbrine[fleet]"
        ) from None
    _reach(address)
    with distributed.Client(address) as client:
        waiting = client.map(judge, tasks, retries=RETRIES, pure=False)
        index = {future.key: i for i, future in enumerate(waiting)}
        for future in distributed.as_completed(waiting):
            yield index[future.key], future.result()


def _reach(address: str) -> None:
    """Something listens there. Raises ManyError; the client itself would say so in a traceback."""
    try:
        at = urlsplit(address)
        if at.scheme not in ("tcp", "tls") or at.hostname is None or at.port is None:
            raise ValueError("no address")
        socket.create_connection((at.hostname, at.port), timeout=10).close()
    except (OSError, ValueError) as wrong:
        raise ManyError(
            f"--dask {address}: {wrong}; expected the address of a scheduler, tcp://HOST:PORT"
        ) from None

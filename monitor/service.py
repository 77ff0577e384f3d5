"""The daemon: ports in, logs and findings out, orders in between. One service a bench.

It holds no judgement of its own: a Recorder a probe writes and judges, this joins them to ports,
clock, control socket, alarms and the process's signals. Nothing that goes wrong in one of these
ends the recording: it is said, and the rest goes on.
"""

from __future__ import annotations

import asyncio
import secrets
import traceback
from collections.abc import Callable, Coroutine, Iterator, Sequence
from contextlib import contextmanager
from datetime import date, datetime
from functools import partial
from pathlib import Path
from typing import Any

from drivers.line import Decoder
from drivers.serial_port import PortError
from monitor import bench as bench_file
from monitor import desk
from monitor.alarms import AlarmError
from monitor.bells import Bells
from monitor.bench import Bench
from monitor.calibration import CalibrationError
from monitor.clock import Clock
from monitor.control import Answer, ControlServer
from monitor.findings import Finding
from monitor.follow import Follower
from monitor.housekeeping import Housekeeping
from monitor.logbook.codec import utc_of, utc_text
from monitor.logbook.writer import LogWriteError, LogWriter
from monitor.mqtt import Publisher
from monitor.places import HeldError, Lock, private_folder, socket_path
from monitor.ports import Ports
from monitor.recorder import Head, Past, Recorder
from monitor.runs import carried_by_last_run, head_of
from monitor.supervisor import notify, watchdog_s
from monitor.telling import Telling

FLUSH_S = 0.03
SYNC_S = 1.5
ASLEEP_S = 2.0
STALLED_S = 5.0  # of the host: as long without a turn, rows may have been missed
CLOCK_STEP_S = 1.0


class ServiceError(RuntimeError):
    """The service cannot start; `str()` is the one line to show."""


class Service:
    """Runs one bench until it is stopped."""

    def __init__(
        self,
        bench_path: Path,
        bench: Bench,
        folder: Path,
        clock: Clock,
        tell: Callable[[Finding], None],
        say: Callable[[str], None],
    ) -> None:
        """`tell` gets every finding as it is concluded, `say` every message, a line each."""
        self.bench_path = bench_path
        self.bench = bench
        self.folder = folder
        self.clock = clock
        self.recorders: dict[str, Recorder] = {}
        self.stopping = asyncio.Event()
        self.started = clock.utc()
        self.zero_s = clock.now_s()
        self.telling = Telling(folder, say)
        self.telling.hooks.append(tell)
        self.bells = Bells(bench_path, clock, say)
        self.telling.hooks.append(self.bells.take)
        self.publisher = Publisher(bench_path, folder, say)
        self.telling.hooks.append(self.publisher.take)
        self.housekeeping = Housekeeping(folder, clock, self.bells.trouble, say)
        self._say = say
        self._ports = Ports(clock, say, self._fault)
        self._flushing: asyncio.TimerHandle | None = None
        self._joining: list[asyncio.Task[None]] = []
        self._days: dict[str, date] = {}
        self._seen = (clock.now_s(), clock.awake_s(), self.started)

    async def run(self) -> None:
        """Record and judge until `stop` is called. Raises ServiceError if it cannot start."""
        asyncio.get_running_loop().set_exception_handler(self._unhandled)
        control = ControlServer(socket_path(self.bench_path), self._ordered)
        around: list[asyncio.Task[None]] = []
        with self._locks(control.path):
            try:
                await self._start()
                await control.open()
                around = [asyncio.create_task(each) for each in self._around()]
                notify("READY=1")
                await self.stopping.wait()
                notify("STOPPING=1")
            finally:
                await control.close()
                await _ended([*around, *self._ports.close_all(), *self._joining])
                await self.bells.close()
                await self.publisher.close()
                for probe in [*self.recorders]:
                    self._end(probe)

    @contextmanager
    def _locks(self, socket: Path) -> Iterator[None]:
        """One service a folder and a bench file. Raises ServiceError, PlaceError."""
        private_folder(self.folder)
        here = "a service already records here; stop it or choose --logs"
        bench = f"a service already runs {self.bench_path.name}; stop it, or watch it"
        try:
            with Lock(self.folder / ".lock", here), Lock(socket.with_suffix(".lock"), bench):
                yield
        except HeldError as wrong:
            raise ServiceError(str(wrong)) from None

    def stop(self) -> None:
        """End cleanly: close the logs, give back the ports."""
        self.stopping.set()

    async def _start(self) -> None:
        """Begin a run of every probe. Raises ServiceError."""
        try:
            await self._begin([*self.bench.probe])
            self.bells.hang(self.bench)
        except AlarmError as wrong:
            raise ServiceError(str(wrong)) from None
        self.publisher.hang(self.bench)
        for recorder in self.recorders.values():
            for what, until_utc in recorder.silences.items():
                self.silence(what, until_utc)
        for probe in self.bench.probe:
            self._open_port(probe)

    async def _begin(self, probes: list[str]) -> None:
        """Begin a run of these, all with one start. Raises ServiceError."""
        started, zero_s = self.clock.utc(), self.clock.now_s()
        while any((self.folder / f"{p}-{started:%Y%m%dT%H%M%SZ}-001.log").exists() for p in probes):
            await asyncio.sleep(0.05)  # a run that began in this very second was killed
            started, zero_s = self.clock.utc(), self.clock.now_s()
        if not self.recorders:
            self.started, self.zero_s = started, zero_s
        run = secrets.token_hex(8)
        for probe in probes:
            try:
                await self._record(probe, started, zero_s, run)
            except (LogWriteError, CalibrationError, PortError, OSError) as wrong:
                why = wrong.strerror if type(wrong) is OSError else str(wrong)
                raise ServiceError(f"{self.folder}: {probe}: {why}") from None

    async def _record(self, probe: str, started: datetime, zero_s: float, run: str) -> None:
        settings = self.bench.probe[probe]
        if settings.port is None:
            place = f"{self.bench_path.name}: probe.{probe}.port"
            raise ServiceError(f"{place}: missing; expected a port to read")
        head = head_of(self.bench, probe)
        past = await asyncio.to_thread(self._past, probe, started)
        writer = LogWriter(self.folder, probe, started, run)
        self.telling.open(probe, started)
        recorder = Recorder(
            probe,
            Decoder(settings),
            writer,
            Follower(probe, watch=partial(self.publisher.see, probe, started)),
            self.clock,
            zero_s,
            lambda found: self.telling.tell(probe, found, zero_s - self.zero_s),
            self._say,
            partial(self.bells.trouble, probe),
            self._watch_clocks,
            self._flush_soon,
        )
        recorder.begin(head, past)
        self.recorders[probe] = recorder
        self._days[probe] = self.clock.utc().date()

    def _past(self, probe: str, started: datetime) -> Past:
        try:
            return carried_by_last_run(self.folder, probe, started, self.bench)
        except Exception as wrong:  # anybody may have written into that log
            self._say(f"{probe}: the run before tells nothing, begun clean: {wrong}")
            return Past({})

    def _around(self) -> list[Coroutine[None, None, None]]:
        """All that runs beside the ports."""
        fast = self.clock.speed
        tick_s = 1.0 / fast if fast < 20 else 0.05
        return [
            self._every(tick_s, self._tick),
            self._every(1.0, self.bells.tick),
            self._syncs(),
            self._watchdog(),
            self.housekeeping.work(lambda: self.bench.logs, self._active),
        ]

    async def _every(self, every_s: float, act: Callable[[], None]) -> None:
        while True:
            await asyncio.sleep(every_s)
            self._guarded(act)

    def _guarded(self, act: Callable[[], None]) -> None:
        """What fails for one may not keep it from the others."""
        try:
            act()
        except Exception as wrong:
            self._fault(wrong)

    async def _syncs(self) -> None:
        while True:
            await asyncio.sleep(SYNC_S)
            for recorder in list(self.recorders.values()):
                await asyncio.to_thread(recorder.writer.sync)

    async def _watchdog(self) -> None:
        every_s = watchdog_s()
        while every_s is not None:
            notify("WATCHDOG=1")
            await asyncio.sleep(every_s)

    def _flush_soon(self) -> None:
        if self._flushing is None:
            self._flushing = asyncio.get_running_loop().call_later(FLUSH_S, self._flush)

    def _flush(self) -> None:
        self._flushing = None
        self._watch_clocks()
        for recorder in self.recorders.values():
            self._guarded(recorder.flush)

    def _tick(self) -> None:
        """Once a second of the host: time passes, days end."""
        self._watch_clocks()
        today = self.clock.utc().date()
        for probe, recorder in self.recorders.items():
            if today > self._days[probe] and recorder.next_part():
                self._days[probe] = today
            self._guarded(recorder.tick)
        self.telling.tell_of_all(self.bench, self.recorders, self.zero_s)

    def _watch_clocks(self) -> None:
        """Write down where the machine slept, this process stood still, the wall clock was set."""
        before = self._seen
        self._seen = now = (self.clock.now_s(), self.clock.awake_s(), self.clock.utc())
        passed = now[0] - before[0]
        slept = passed - (now[1] - before[1])
        stepped = (now[2] - before[2]).total_seconds() - passed
        asleep, stalled = slept > ASLEEP_S, passed > STALLED_S * self.clock.speed
        for recorder in self.recorders.values():
            if asleep or stalled:
                recorder.gap("asleep" if asleep else "stalled")
            if asleep or abs(stepped) > CLOCK_STEP_S:
                fields = {"before": utc_text(before[2]), "after": utc_text(now[2])}
                recorder.event("clock", {**fields, "slept_s": round(max(slept, 0.0), 3)})

    def _open_port(self, probe: str) -> None:
        self._ports.open(probe, self.bench.probe[probe], self.recorders[probe])

    def _end(self, probe: str) -> None:
        try:
            self.recorders.pop(probe).end()
            self.telling.close(probe)
        except Exception as wrong:
            self._fault(wrong)

    def _active(self) -> set[Path]:
        return {recorder.writer.path for recorder in self.recorders.values()}

    def _fault(self, wrong: BaseException) -> None:
        """A bug of ours: say it once, in one line, and go on."""
        trace = traceback.extract_tb(wrong.__traceback__)
        at = f"{Path(trace[-1].filename).name}:{trace[-1].lineno}" if trace else "?"
        text = f"error of the program, it goes on: {type(wrong).__name__}: {wrong} ({at})"
        self.bells.trouble("", f"error at {at}", text[:400])

    def _unhandled(self, loop: asyncio.AbstractEventLoop, context: dict[str, Any]) -> None:
        self._fault(context.get("exception") or RuntimeError(context.get("message")))

    # The bench file read again

    def reload(self) -> str:
        """Read the bench file again; if it does not check, say so and carry on with the old one.

        Returns why it was not taken, "" if it was.
        """
        try:
            new = bench_file.parse(self.bench_path.read_text("utf-8"), self.bench_path.name)
            heads = {name: head_of(new, name) for name in new.probe}
            for name, settings in new.probe.items():
                if settings.port is None:
                    place = f"{self.bench_path.name}: probe.{name}.port"
                    raise ServiceError(f"{place}: missing; expected a port to read")
            self.bells.hang(new)
        except (OSError, ValueError, AlarmError, ServiceError, CalibrationError) as wrong:
            self._say(f"bench file not taken, the old one stays in force: {wrong}")
            return str(wrong)
        self.publisher.hang(new)
        old, self.bench = self.bench, new
        for probe in [*self.recorders]:
            if probe not in new.probe:
                self._ports.close(probe)
                self._end(probe)
        for probe in [*self.recorders]:
            if heads[probe] != self.recorders[probe].settings:
                self._change(probe, old, heads[probe])
        fresh = [probe for probe in new.probe if probe not in self.recorders]
        if fresh:
            self._joining.append(asyncio.create_task(self._join(fresh)))
        self._say("bench file read again")
        return ""

    def _change(self, probe: str, old: Bench, head: Head) -> None:
        recorder, was, now = self.recorders[probe], old.probe[probe], self.bench.probe[probe]
        recorder.change(head)
        if (was.period_unit, was.tick_hz) != (now.period_unit, now.tick_hz):
            recorder.decoder = Decoder(now)
        if (was.port, was.baud, was.reset_on_open) != (now.port, now.baud, now.reset_on_open):
            recorder.link(False, "moved")
            self._open_port(probe)

    async def _join(self, probes: list[str]) -> None:
        """Begin a run of probes that were not there before."""
        try:
            await self._begin(probes)
        except ServiceError as wrong:
            self._say(f"not recorded: {wrong}")
        for probe in probes:
            if probe in self.recorders:
                self._open_port(probe)

    def silence(self, what: str, until_utc: str) -> None:
        """No alarm about this until then."""
        left_s = (utc_of(until_utc) - self.clock.utc()).total_seconds()
        self.bells.silence(what, self.clock.now_s() + left_s)

    async def _ordered(self, message: dict[str, Any]) -> Answer:
        return desk.carry_out(self, message)


async def _ended(tasks: Sequence[asyncio.Task[Any]]) -> None:
    for task in tasks:
        task.cancel()
    await asyncio.gather(*tasks, return_exceptions=True)

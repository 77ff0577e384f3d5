"""The daemon: ports in, logs and findings out, orders in between. One service a bench.

It holds no judgement of its own: a Recorder a probe writes and judges, this joins them to ports,
clock, control socket and the process's signals.
"""

from __future__ import annotations

import asyncio
import fcntl
import os
import secrets
from collections.abc import Callable, Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import IO, Any

from drivers.line import Decoder
from drivers.serial_port import SerialPort
from monitor import bench as bench_file
from monitor.alarms import AlarmError, AlarmLine, check_owner
from monitor.bench import Bench, BenchError
from monitor.calibration import CalibrationError, fit
from monitor.chain import calibration_of
from monitor.clock import Clock
from monitor.control import Answer, ControlServer
from monitor.findings import Finding, line
from monitor.follow import Follower
from monitor.logbook import reader
from monitor.logbook.codec import utc_of, utc_text
from monitor.logbook.writer import LogWriter
from monitor.orders import Order, OrderError, parse
from monitor.places import private_folder, socket_path
from monitor.recorder import Head, Recorder
from monitor.supervisor import notify, watchdog_s
from monitor.tanks import Seen, Together

FLUSH_S = 0.03
SYNC_S = 1.5
ASLEEP_S = 2.0
CLOCK_STEP_S = 1.0

PortFactory = Callable[..., SerialPort]


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
        self.hooks: list[Callable[[Finding], None]] = [tell]
        self._say = say
        self._run = secrets.token_hex(8)
        self._ports: dict[str, asyncio.Task[None]] = {}
        self._together = Together()
        self._files: dict[str, IO[str]] = {}
        self._lock: int | None = None
        self.alarms: list[AlarmLine] = []
        self._day = self.started.date()
        self._seen = (clock.now_s(), clock.awake_s(), self.started)

    async def run(self) -> None:
        """Record and judge until `stop` is called. Raises ServiceError if it cannot start."""
        self._take_lock()
        self._raise_alarms()
        control = ControlServer(socket_path(self.bench_path), self._ordered)
        try:
            for probe in self.bench.probe:
                self._start_probe(probe)
            await control.open()
            async with asyncio.TaskGroup() as group:
                tasks = [group.create_task(each) for each in (self._flushes(), self._ticks())]
                tasks.append(group.create_task(self._syncs()))
                tasks += [group.create_task(alarm.work()) for alarm in self.alarms]
                tasks.append(group.create_task(self._watchdog()))
                notify("READY=1")
                await self.stopping.wait()
                notify("STOPPING=1")
                for task in [*tasks, *self._ports.values()]:
                    task.cancel()
        finally:
            await control.close()
            await asyncio.gather(*self._ports.values(), return_exceptions=True)
            for recorder in self.recorders.values():
                recorder.end()
            for file in self._files.values():
                file.close()
            if self._lock is not None:
                os.close(self._lock)

    def stop(self) -> None:
        """End cleanly: close the logs, give back the ports."""
        self.stopping.set()

    def reload(self) -> None:
        """Read the bench file again; if it does not check, say so and carry on with the old one."""
        try:
            new = bench_file.parse(self.bench_path.read_text(), self.bench_path.name)
            calibrations = {name: head_of(new, name) for name in new.probe}
        except (OSError, UnicodeDecodeError, BenchError, CalibrationError) as wrong:
            self._say(f"bench file not taken, the old one stays in force: {wrong}")
            return
        old, self.bench = self.bench, new
        for probe in [*self.recorders]:
            if probe not in new.probe:
                self._stop_probe(probe)
        for probe, settings in calibrations.items():
            if probe not in self.recorders:
                self._start_probe(probe)
                continue
            if settings != self.recorders[probe].settings:
                self.recorders[probe].change(settings)
            if new.probe[probe].port != old.probe[probe].port or (
                new.probe[probe].baud != old.probe[probe].baud
            ):
                self._ports.pop(probe).cancel()
                self._open_port(probe)
        self._say("bench file read again")

    def _take_lock(self) -> None:
        private_folder(self.folder)
        self._lock = os.open(self.folder / ".lock", os.O_CREAT | os.O_RDWR | os.O_NOFOLLOW, 0o600)
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise ServiceError(
                f"{self.folder}: a service already records here; stop it or choose --logs"
            ) from None

    def _raise_alarms(self) -> None:
        try:
            check_owner(self.bench_path, self.bench.alarm)
        except AlarmError as wrong:
            raise ServiceError(str(wrong)) from None
        for name, settings in self.bench.alarm.items():
            alarm = AlarmLine(name, settings, self.clock.now_s, self._say)
            self.alarms.append(alarm)
            self.hooks.append(alarm.take)

    async def _watchdog(self) -> None:
        every_s = watchdog_s()
        while every_s is not None:
            notify("WATCHDOG=1")
            await asyncio.sleep(every_s)

    def _start_probe(self, probe: str) -> None:
        settings = head_of(self.bench, probe)
        carried = carried_by_last_run(self.folder, probe, self.started)
        writer = LogWriter(self.folder, probe, self.started, self._run)
        stamp = f"{self.started:%Y%m%dT%H%M%SZ}"
        self._files[probe] = _append_only(self.folder / f"{probe}-{stamp}.findings.jsonl")
        recorder = Recorder(
            probe,
            Decoder(self.bench.probe[probe]),
            writer,
            Follower(probe),
            self.clock,
            self.zero_s,
            lambda found: self._tell(probe, found),
            self._say,
        )
        recorder.begin(settings, carried)
        self.recorders[probe] = recorder
        self._open_port(probe)

    def _stop_probe(self, probe: str) -> None:
        self._ports.pop(probe).cancel()
        self.recorders.pop(probe).end()
        self._files.pop(probe).close()

    def _open_port(self, probe: str) -> None:
        settings = self.bench.probe[probe]
        recorder = self.recorders[probe]
        if settings.port is None:
            place = f"{self.bench_path.name}: probe.{probe}.port"
            raise ServiceError(f"{place}: missing; expected a port to read")
        port = SerialPort(
            settings.port,
            settings.baud,
            on_bytes=recorder.on_bytes,
            on_up=lambda: recorder.link(True),
            on_down=lambda why: self._down(probe, why),
            clock=self.clock,
            reset_on_open=settings.reset_on_open,
        )
        self._ports[probe] = asyncio.create_task(port.run(), name=f"port of {probe}")

    def _down(self, probe: str, why: str) -> None:
        self._say(f"{probe}: {why}")
        self.recorders[probe].link(False)

    def _tell(self, probe: str, found: Sequence[Finding]) -> None:
        self._together.take(found)
        for finding in found:
            self._files[probe].write(line(finding) + "\n")
            for hook in self.hooks:
                hook(finding)

    def _tell_of_all(self) -> None:
        """What takes all the probes, up to the second that all their logs have closed."""
        seen = []
        for name, recorder in self.recorders.items():
            chain = recorder.follower.chain
            tank = self.bench.probe[name].tank
            seen.append(Seen(name, tank, chain.closed_t, [(chain.watched, 0.0)]))
        if not seen:
            return
        for finding in self._together.advance(seen)[1]:
            for each in seen:
                if each.tank == finding["tank"]:
                    self._files[each.probe].write(line(finding) + "\n")
            for hook in self.hooks:
                hook(finding)

    async def _flushes(self) -> None:
        while True:
            await asyncio.sleep(FLUSH_S)
            for recorder in self.recorders.values():
                recorder.flush()

    async def _syncs(self) -> None:
        while True:
            await asyncio.sleep(SYNC_S)
            for recorder in list(self.recorders.values()):
                await asyncio.to_thread(recorder.writer.sync)

    async def _ticks(self) -> None:
        """Once a second of the host: time passes, clocks step, days end."""
        while True:
            await asyncio.sleep(1.0 / self.clock.speed if self.clock.speed < 20 else 0.05)
            self._watch_clocks()
            utc = self.clock.utc()
            if utc.date() > self._day:
                self._day = utc.date()
                for recorder in self.recorders.values():
                    recorder.next_part()
            for recorder in self.recorders.values():
                recorder.tick()
            self._tell_of_all()
            for alarm in self.alarms:
                alarm.tick()
            for file in self._files.values():
                file.flush()

    def _watch_clocks(self) -> None:
        """Write down where the machine slept and where the wall clock was set."""
        before, self._seen = (
            self._seen,
            (
                self.clock.now_s(),
                self.clock.awake_s(),
                self.clock.utc(),
            ),
        )
        passed = self._seen[0] - before[0]
        slept = passed - (self._seen[1] - before[1])
        stepped = (self._seen[2] - before[2]).total_seconds() - passed
        for recorder in self.recorders.values():
            if slept > ASLEEP_S:
                recorder.gap("asleep")
            if slept > ASLEEP_S or abs(stepped) > CLOCK_STEP_S:
                fields = {"before": utc_text(before[2]), "after": utc_text(self._seen[2])}
                recorder.event("clock", {**fields, "slept_s": round(max(slept, 0.0), 3)})

    async def _ordered(self, message: dict[str, Any]) -> Answer:
        """Carry out an order; the answer is given once it is in the log."""
        if message.get("order") == "status":
            return {"ok": True, "probes": {name: self.status(name) for name in self.recorders}}
        if message.get("order") == "reload":
            self.reload()
            return {"ok": True}
        try:
            order = parse(message, self.bench)
            written = [self._write(probe, order) for probe in order.probes]
        except (OrderError, CalibrationError) as wrong:
            return {"ok": False, "why": str(wrong)}
        if order.kind == "silence":
            self._silence(order)
        if not all(written):
            return {"ok": False, "why": "nothing can be written to the log now; order not taken"}
        return {"ok": True, "time_s": self.recorders[order.probes[0]].run_s - order.ago_s}

    def _write(self, probe: str, order: Order) -> bool:
        recorder = self.recorders[probe]
        fields = order.fields
        if order.kind == "calibration":
            fields = self._chosen(probe, str(fields.get("set", "")))
        when = None if order.ago_s == 0 else recorder.run_s - order.ago_s
        return recorder.event(order.kind, fields, when)

    def _silence(self, order: Order) -> None:
        left_s = (utc_of(order.fields["until_utc"]) - self.clock.utc()).total_seconds()
        for alarm in self.alarms:
            alarm.silence(str(order.fields["what"]), self.clock.now_s() + left_s)

    def _chosen(self, probe: str, named: str) -> Mapping[str, Any]:
        """The calibration that a set of standards gives. Raises OrderError, CalibrationError."""
        settings = self.bench.probe[probe]
        standards = [each for each in settings.standard if each.set == named]
        if not standards:
            sets = ", ".join(sorted({each.set or "unnamed" for each in settings.standard}))
            raise OrderError(f"set {named[:64]!r} is not in the bench file; expected one of {sets}")
        return fit(standards, settings.medium, settings.tick_us).as_event()

    def status(self, probe: str) -> dict[str, Any]:
        """What a watcher may ask about one probe besides its log."""
        recorder = self.recorders[probe]
        return {
            "path": str(recorder.writer.path),
            "rows": recorder.rows,
            "linked": recorder.linked,
            "paused": recorder.paused,
            "unwritten": recorder.unwritten,
            "rejected": recorder.decoder.counts.total(),
        }


def _append_only(path: Path) -> IO[str]:
    mode = os.O_WRONLY | os.O_APPEND | os.O_CREAT | os.O_NOFOLLOW
    return os.fdopen(os.open(path, mode, 0o600), "w", encoding="ascii")


def head_of(bench: Bench, probe: str) -> Head:
    """The events at the head of a part. Raises CalibrationError."""
    head: Head = [("bench", bench.for_probe(probe).as_event())]
    calibration = calibration_of(bench, probe)
    if calibration is not None:
        head.append(("calibration", calibration.as_event()))
    return head


def carried_by_last_run(folder: Path, probe: str, started: datetime) -> Mapping[str, Any]:
    """What the last run of this probe would tell one that starts now.

    Nothing needs to have been saved when that run ended: its last part is judged again.
    """
    last = reader.last_part(folder, probe)
    if last is None:
        return {}
    follower = Follower(probe, first_part=last.part)
    for chunk in last.chunks():
        follower.feed(chunk)
    shift = (last.header.started - started).total_seconds()
    return dict(shifted_times(follower.chain.carry(), shift))


def shifted_times(carried: Any, by_s: float) -> Any:
    """Carried state with its times counted from another run's `started`.

    A key that holds a time is `t`, `time_s`, or ends in `_t`: the rule of every `carry`.
    """
    if isinstance(carried, dict):
        return {
            key: _moved(value, by_s) if _is_time(key) else shifted_times(value, by_s)
            for key, value in carried.items()
        }
    if isinstance(carried, list | tuple):
        return [shifted_times(each, by_s) for each in carried]
    return carried


def _moved(value: Any, by_s: float) -> Any:
    if isinstance(value, list | tuple):
        return [_moved(each, by_s) for each in value]
    if isinstance(value, int | float) and not isinstance(value, bool):
        return value + by_s
    return value


def _is_time(key: str) -> bool:
    return key in ("t", "time_s") or key.endswith("_t")

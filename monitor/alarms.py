"""From findings to people: bell, a command, notifications; repeated, silenced, never flooding.

Rules:
- Alarms never wait for the recording and never block it: each has a worker and a bounded queue; a
  worker that is busy takes all that came meanwhile in one go, and it delivers at most BURST times
  in BURST_S.
- A condition is told when it begins, again every `repeat_min` while it lasts, and when it ends.
  With `escalate_min` it is told only once it has lasted that long unsilenced: the second rung.
- A command is an argument list, run without a shell, findings on its standard input, a minimal
  environment, its own process group, 30 s. It is taken only from a bench file that nobody else
  can write.
- The path to people is tried at start and every day; when it fails, the service says so.
- What keeps the service from its own work (`service`: a full disk) is told by every alarm.
"""

from __future__ import annotations

import asyncio
import logging
import os
import signal
import stat
from collections import deque
from collections.abc import Awaitable, Callable, Mapping, Sequence
from pathlib import Path

from monitor.bench import Alarm
from monitor.findings import Finding, line
from monitor.places import PlaceError, secret
from monitor.printable import printable

COMMAND_S = 30.0
TRY_EVERY_S = 86_400.0
QUEUE = 200
BURST = 10
BURST_S = 300.0
SERVICE = "service"  # kind of what the service says of itself

Key = tuple[str, str, str]


class AlarmError(RuntimeError):
    """An alarm of the bench file may not be used; `str()` is the one line to show."""


def check_owner(bench_path: Path, alarms: Mapping[str, Alarm]) -> None:
    """Refuse alarm commands from a bench file that somebody else could have written.

    Raises AlarmError.
    """
    commands = {name: alarm.command for name, alarm in alarms.items() if alarm.command}
    if not commands:
        return
    info = bench_path.stat()
    if info.st_uid not in (os.getuid(), 0) or stat.S_IMODE(info.st_mode) & 0o022:
        raise AlarmError(
            f"{bench_path}: alarm commands are refused, others could have written this file;"
            " expected: owned by you (or root), writable by nobody else (chmod go-w)"
        )
    for name, command in commands.items():
        if not os.path.isabs(command[0]):
            raise AlarmError(
                f"{bench_path.name}: alarm.{name}.command: {command[0]!r} is no absolute path;"
                " expected one such as /usr/bin/notify-send"
            )


def key_of(finding: Finding) -> Key:
    """What tells one condition from another: kind, whose, and name."""
    whose = finding.get("probe") or finding.get("tank") or ""
    named = finding.get("fault") or finding.get("which") or finding.get("what") or ""
    return finding["finding"], str(whose), str(named)


def is_trouble(finding: Finding) -> bool:
    """Whether this finding is one that a person may have to act on."""
    kind = finding["finding"]
    if kind == "belief":
        return str(finding["belief"]) == "not-believed"
    if kind == "rest":
        return finding.get("verdict") == "disagrees" and finding.get("to_t") is None
    return True


class Condition:
    """One condition in force, as one alarm sees it."""

    def __init__(self, finding: Finding, now_s: float) -> None:
        self.finding = finding
        self.since_s = now_s
        self.told_s: float | None = None


class AlarmLine:
    """One `[alarm.*]` table at work."""

    def __init__(
        self,
        name: str,
        settings: Alarm,
        now_s: Callable[[], float],
        say: Callable[[str], None],
        send: Callable[[Alarm, Sequence[Finding]], Awaitable[str | None]],
    ) -> None:
        """`send` delivers and gives what went wrong, or None."""
        self.name = name
        self.settings = settings
        self.failed: str | None = None  # why the path to people does not work now
        self.in_force: dict[Key, Condition] = {}
        self.silent_until_s: dict[str, float] = {}
        self._now_s = now_s
        self._say = say
        self._send = send
        self._sent: deque[float] = deque(maxlen=BURST)
        self._queue: asyncio.Queue[Finding] = asyncio.Queue(QUEUE)
        self._overrun = 0

    def take(self, finding: Finding) -> None:
        """A finding was concluded. Never blocks."""
        if finding["finding"] not in (*self.settings.findings, SERVICE):
            return
        key = key_of(finding)
        over = finding.get("to_t") is not None or not is_trouble(finding)
        if over:
            condition = self.in_force.pop(key, None)
            if condition is not None and condition.told_s is not None:
                self._enqueue(finding)
            return
        self.in_force.setdefault(key, Condition(finding, self._now_s())).finding = finding
        self.tick()

    def silence(self, what: str, until_s: float) -> None:
        """Tell nothing of `what` (a kind, name, probe, tank or "all") until then."""
        self.silent_until_s[what] = until_s

    def tick(self) -> None:
        """Tell what is due."""
        now = self._now_s()
        for key, condition in self.in_force.items():
            if self._silenced(key, now):
                continue
            if now - condition.since_s < 60 * (self.settings.escalate_min or 0):
                continue
            told = condition.told_s
            if told is None or now - told >= 60 * self.settings.repeat_min:
                condition.told_s = now
                self._enqueue(condition.finding)

    async def work(self) -> None:
        """Deliver for ever; tries the path to people at start and every day."""
        test: Finding = {"finding": "test", "t": 0.0, "text": "the alarm path is being tried"}
        if not (self.settings.command or self.settings.notify):
            return
        await self._deliver([test])
        while True:
            try:
                async with asyncio.timeout(TRY_EVERY_S):
                    batch = [await self._queue.get()]
            except TimeoutError:
                batch = [test]
            await asyncio.sleep(self._pause_s())
            while not self._queue.empty():
                batch.append(self._queue.get_nowait())
            if self._overrun:
                text = f"{self._overrun} more alarms came than could be told"
                batch.append({"finding": "overrun", "t": batch[-1]["t"], "text": text})
                self._overrun = 0
            await self._deliver(batch)

    def _pause_s(self) -> float:
        """How long to wait so as not to flood."""
        if len(self._sent) < BURST:
            return 0.0
        return max(self._sent[0] + BURST_S - self._now_s(), 0.0)

    def _silenced(self, key: Key, now: float) -> bool:
        return any(
            now < until and what in ("all", *key) for what, until in self.silent_until_s.items()
        )

    def _enqueue(self, finding: Finding) -> None:
        try:
            self._queue.put_nowait(finding)
        except asyncio.QueueFull:
            self._overrun += 1

    async def _deliver(self, batch: Sequence[Finding]) -> None:
        self._sent.append(self._now_s())
        try:
            wrong = await self._send(self.settings, batch)
        except Exception as failed:  # whatever a notification's library raises; it may name secrets
            wrong = type(failed).__name__
        if wrong and wrong != self.failed:
            self._say(f"alarm {self.name} CANNOT WARN: {wrong}")
        elif self.failed and not wrong:
            self._say(f"alarm {self.name} can warn again")
        self.failed = wrong or None


async def deliver(near: Path, settings: Alarm, batch: Sequence[Finding]) -> str | None:
    """Hand findings to the alarm's command and addresses; what went wrong, or None.

    near : folder of the bench file, from which the file of addresses is named
    """
    wrongs = []
    if settings.command:
        wrongs.append(await run_command(settings.command, batch))
    if settings.notify:
        addresses = near / Path(settings.notify).expanduser()
        wrongs.append(await asyncio.to_thread(notify, addresses, batch))
    return "; ".join(wrong for wrong in wrongs if wrong) or None


async def run_command(command: Sequence[str], batch: Sequence[Finding]) -> str | None:
    """Run an alarm command with the findings on its standard input; what went wrong, or None."""
    text = "".join(line(finding) + "\n" for finding in batch).encode()
    try:
        process = await asyncio.create_subprocess_exec(
            *command,
            stdin=asyncio.subprocess.PIPE,
            stdout=asyncio.subprocess.DEVNULL,
            stderr=asyncio.subprocess.DEVNULL,
            env={"PATH": "/usr/local/bin:/usr/bin:/bin", "HOME": os.path.expanduser("~")},
            start_new_session=True,
        )
    except OSError as wrong:
        return f"{command[0]}: {wrong.strerror}"
    try:
        async with asyncio.timeout(COMMAND_S):
            await process.communicate(text)
    except TimeoutError:
        return f"{command[0]}: not done within {COMMAND_S:.0f} s"
    except (BrokenPipeError, ConnectionResetError):
        pass  # it ended without reading: its exit code tells
    finally:
        _kill_group(process.pid)
        await process.wait()
    return None if process.returncode == 0 else f"{command[0]}: exit {process.returncode}"


def _kill_group(leader: int) -> None:
    """End what a command left behind, too."""
    try:
        os.killpg(leader, signal.SIGKILL)
    except ProcessLookupError:
        pass


def notify(addresses: Path, batch: Sequence[Finding]) -> str | None:
    """Send to the addresses in this file of mode 0600; what went wrong, or None. Blocks."""
    try:
        import apprise
    except ImportError:
        return "notify needs the extra `alerts`: pip install 'stillbrine[alerts]'"
    logging.getLogger("apprise").setLevel(logging.CRITICAL + 1)  # it would write addresses
    try:
        lines = [each.strip() for each in secret(addresses).splitlines()]
    except PlaceError as wrong:
        return str(wrong)
    sender = apprise.Apprise()
    urls = [each for each in lines if each and not each.startswith("#")]
    taken = [bool(sender.add(url)) for url in urls]
    body = "\n".join(in_words(finding) for finding in batch)
    if not taken or not all(taken):
        at = taken.index(False) + 1 if taken else 0
        what = f"address {at} is none that can be used" if taken else "no address in it"
        return f"{addresses.name}: {what}; expected one a line"
    sent = sender.notify(title="stillbrine", body=body, body_format=apprise.NotifyFormat.TEXT)
    return None if sent else f"{addresses.name}: not every address took the notification"


def in_words(finding: Finding) -> str:
    """A finding as a line for people."""
    kind, whose, named = key_of(finding)
    over = "over: " if finding.get("to_t") is not None else ""
    why = finding.get("text") or finding.get("evidence") or finding.get("why") or ""
    value = finding.get("value")
    figure = f"{value:.6g} beyond {finding.get('bound'):.6g}" if kind == "limit" and value else ""
    words = [over + kind, named, f"({whose})" if whose else "", figure]
    said = " ".join(word for word in words if word)
    return printable(f"{said}: {why}" if why else said, 500)

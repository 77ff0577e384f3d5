"""All alarms of a bench: hung from its bench file, hung anew when that is read again.

Beside the alarms it keeps what the service says of itself (`trouble`) and calls the addresses of
the user's that expect a sign of life, so that a service that is gone is missed.
"""

from __future__ import annotations

import asyncio
import urllib.error
import urllib.request
from collections.abc import Callable, Mapping, Sequence
from functools import partial
from pathlib import Path

from monitor.alarms import SERVICE, AlarmLine, check_owner, deliver
from monitor.bench import Alarm, Bench
from monitor.clock import Clock
from monitor.findings import Finding
from monitor.places import PlaceError, secret

HEARTBEAT_S = 300.0
HEARTBEAT_WAIT_S = 10.0


class Bells:
    """The alarms in force, and the troubles of the service."""

    def __init__(self, bench_path: Path, clock: Clock, say: Callable[[str], None]) -> None:
        self.lines: dict[str, AlarmLine] = {}
        self._path = bench_path
        self._clock = clock
        self._zero_s = clock.now_s()
        self._say = say
        self._troubles: dict[tuple[str, str], Finding] = {}
        self._tasks: list[asyncio.Task[None]] = []
        self._hung: Mapping[str, Alarm] = {}

    def hang(self, bench: Bench) -> None:
        """Put these alarms in force. Raises AlarmError; then the ones before stay."""
        check_owner(self._path, bench.alarm)
        if bench.alarm == self._hung and self._tasks:
            return
        self._hung = bench.alarm
        before, self.lines = self.lines, {}
        for task in self._tasks:
            task.cancel()
        send = partial(deliver, self._path.resolve().parent)
        for name, settings in bench.alarm.items():
            line = AlarmLine(name, settings, self._clock.now_s, self._say, send)
            if name in before:
                line.in_force = before[name].in_force
                line.silent_until_s = before[name].silent_until_s
            self.lines[name] = line
        for finding in self._troubles.values():
            self.take(finding)
        works = [line.work() for line in self.lines.values()]
        works += [self._live(n, a) for n, a in bench.alarm.items() if a.heartbeat_url_file]
        self._tasks = [asyncio.create_task(work) for work in works]

    def take(self, finding: Finding) -> None:
        """A finding was concluded."""
        for line in self.lines.values():
            line.take(finding)

    def tick(self) -> None:
        """Tell what is due; call about once a second."""
        for line in self.lines.values():
            line.tick()

    def silence(self, what: str, until_s: float) -> None:
        """Tell nothing of `what` until then, a reading of the clock."""
        for line in self.lines.values():
            line.silence(what, until_s)

    @property
    def failures(self) -> dict[str, str]:
        """The alarms that cannot warn now, and why."""
        return {name: line.failed for name, line in self.lines.items() if line.failed}

    def trouble(self, probe: str, what: str, text: str | None) -> None:
        """Something keeps the service from its work (None: no more): said once, told by all."""
        key, t = (probe, what), self._clock.now_s() - self._zero_s
        if text is None:
            if (over := self._troubles.pop(key, None)) is not None:
                self.take({**over, "t": t, "to_t": t})
            return
        if key not in self._troubles:
            self._say(f"{probe}: {text}" if probe else text)
        since = self._troubles.get(key, {}).get("from_t", t)
        finding: Finding = {"finding": SERVICE, "probe": probe, "t": t, "from_t": since}
        self._troubles[key] = {**finding, "to_t": None, "what": what, "text": text}
        self.take(self._troubles[key])

    async def close(self) -> None:
        """No more alarms."""
        for task in self._tasks:
            task.cancel()
        await asyncio.gather(*self._tasks, return_exceptions=True)

    async def _live(self, name: str, settings: Alarm) -> None:
        file = self._path.resolve().parent / Path(str(settings.heartbeat_url_file)).expanduser()
        failed: str | None = None
        while True:
            wrong = await asyncio.to_thread(call, file)
            if wrong and wrong != failed:
                self._say(f"alarm {name}: no sign of life given: {wrong}")
            failed = wrong
            await asyncio.sleep(HEARTBEAT_S)


class _Stay(urllib.request.HTTPRedirectHandler):
    """Follows no redirection: only the address of the user's is called."""

    def redirect_request(self, *_: object) -> None:
        return None


def call(file: Path) -> str | None:
    """Call the one address in this file of mode 0600; what went wrong, or None. Blocks."""
    try:
        lines: Sequence[str] = secret(file).split()
    except PlaceError as wrong:
        return str(wrong)
    if len(lines) != 1 or not lines[0].startswith(("http://", "https://")):
        return f"{file.name}: no address; expected one, http:// or https://"
    opener = urllib.request.build_opener(urllib.request.ProxyHandler({}), _Stay)
    try:
        with opener.open(lines[0], timeout=HEARTBEAT_WAIT_S):
            return None
    except urllib.error.HTTPError as wrong:
        return f"{file.name}: the address answers {wrong.code}"
    except (OSError, ValueError):
        return f"{file.name}: the address does not answer"

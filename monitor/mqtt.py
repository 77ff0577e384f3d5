"""Findings and minute summaries to an MQTT 5 broker, for a site that watches many benches.

Topics below the bench file's `topic`, JSON, quality of service 1 (at least once):
    service                  "online", and "offline" as last will; retained
    probe/PROBE/state        the newest minute and what is believed; retained
    probe/PROBE/minute       each minute's summary
    probe/PROBE/finding, tank/TANK/finding

Rules:
- Nothing that arrives is an order: nothing is subscribed to.
- What the broker has not acknowledged waits in a file, also over a restart; it is bounded, and
  what it cannot hold any more is counted and said, the oldest first.
- TLS is verified. Name and password stand in a file of mode 0600: `username = "..."`,
  `password = "..."`.
"""

from __future__ import annotations

import asyncio
import json
import math
import random
import ssl
import tomllib
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from monitor.bench import Bench, Mqtt
from monitor.blocks import Second
from monitor.chain import Judges
from monitor.findings import Finding, line
from monitor.logbook.codec import utc_text
from monitor.places import PlaceError, secret
from monitor.spool import Spool

if TYPE_CHECKING:
    import aiomqtt

SPOOL = ".mqtt-queue.jsonl"
AGAIN_S = (1.0, 60.0)  # first and longest wait between attempts
KEEPALIVE_S = 20
ANSWER_S = 10.0
LAST_WORDS_S = 1.0


class MqttError(RuntimeError):
    """The broker's settings cannot be used; `str()` is the one line to show."""


class Publisher:
    """Publishes for as long as the bench file names a broker."""

    def __init__(self, bench_path: Path, folder: Path, say: Callable[[str], None]) -> None:
        """`folder`: of the logs, where what waits is kept."""
        self.connected = False
        self._near = bench_path.resolve().parent
        self._path = folder / SPOOL
        self._say = say
        self._settings: Mqtt | None = None
        self._spool: Spool | None = None
        self._states: dict[str, dict[str, Any]] = {}
        self._minutes: dict[str, Minute] = {}
        self._more = asyncio.Event()
        self._task: asyncio.Task[None] | None = None
        self._told: str | None = None

    def hang(self, bench: Bench) -> None:
        """Publish to this bench file's broker, or no more."""
        if bench.mqtt == self._settings:
            return
        self._settings = bench.mqtt
        if self._task is not None:
            self._task.cancel()
        if bench.mqtt is not None:
            try:
                self._spool = self._spool or Spool(self._path, self._say)
            except OSError as wrong:
                self._say(f"{self._path.name}: {wrong.strerror}; nothing is published")
                return
            self._task = asyncio.create_task(self._work(bench.mqtt))
            if not bench.mqtt.tls:
                self._say(
                    f"mqtt.tls = false: whoever is on the way to {bench.mqtt.host} reads along"
                )

    def take(self, finding: Finding) -> None:
        """A finding was concluded."""
        probe, tank = finding.get("probe"), finding.get("tank")
        if self._settings is None or not (probe or tank):
            return
        self._put(f"probe/{probe}/finding" if probe else f"tank/{tank}/finding", line(finding))

    def see(self, probe: str, started: datetime, second: Second, judges: Judges) -> None:
        """A second of this probe was judged."""
        if self._settings is None:
            return
        minute = self._minutes.get(probe)
        if minute is None or minute.number != second.k // 60:
            if minute is not None:
                self._told_minute(probe, started, minute)
            minute = self._minutes[probe] = Minute(second.k // 60)
        minute.add(second, judges)

    def _told_minute(self, probe: str, started: datetime, minute: Minute) -> None:
        end = started + timedelta(seconds=60.0 * (minute.number + 1))
        summary = {"probe": probe, "utc": utc_text(end.astimezone(UTC)), **minute.figures()}
        self._states[probe] = summary
        self._put(f"probe/{probe}/minute", json.dumps(summary))

    def _put(self, topic: str, payload: str) -> None:
        if self._spool is not None:
            self._spool.put(json.dumps([topic, payload]))
            self._more.set()

    async def close(self) -> None:
        """Say goodbye and end."""
        if self._task is not None:
            self._task.cancel()
            await asyncio.gather(self._task, return_exceptions=True)

    async def _work(self, settings: Mqtt) -> None:
        wait_s = AGAIN_S[0]
        while True:
            try:
                await self._session(settings)
            except MqttError as wrong:
                self._once(f"mqtt: {wrong}")
            except Exception as wrong:  # the library's own errors hold a broker's words
                self._once(f"mqtt: {settings.host}:{settings.port}: {_why(wrong)}; tried again")
            if self.connected:
                self.connected, wait_s = False, AGAIN_S[0]
            await asyncio.sleep(wait_s * random.uniform(0.75, 1.25))
            wait_s = min(2 * wait_s, AGAIN_S[1])

    def _once(self, text: str) -> None:
        if text != self._told:
            self._told = text
            self._say(text)

    async def _session(self, settings: Mqtt) -> None:
        """One connection, until it is lost."""
        async with self._client(settings) as client:
            say = partial(client.publish, f"{settings.topic}/service", qos=1, retain=True)
            await say("online")
            self.connected, self._told = True, None
            self._say(f"mqtt: publishing to {settings.host}:{settings.port}")
            works = [asyncio.create_task(_until_lost(client))]
            works.append(asyncio.create_task(self._drain(client, settings.topic)))
            try:
                done, _ = await asyncio.wait(works, return_when=asyncio.FIRST_COMPLETED)
                for work in done:
                    work.result()
            except asyncio.CancelledError:
                async with asyncio.timeout(LAST_WORDS_S):
                    await say("offline")
                raise
            finally:
                for work in works:
                    work.cancel()
                await asyncio.gather(*works, return_exceptions=True)

    async def _drain(self, client: aiomqtt.Client, topic: str) -> None:
        """Publish what waits, for ever; what was acknowledged waits no more."""
        assert self._spool is not None
        while True:
            self._more.clear()
            while (text := self._spool.first()) is not None:
                where, payload = json.loads(text)
                await client.publish(f"{topic}/{where}", payload, qos=1)
                self._spool.done()
            for probe, state in [*self._states.items()]:
                where = f"{topic}/probe/{probe}/state"
                await client.publish(where, json.dumps(state), qos=1, retain=True)
            await self._more.wait()

    def _client(self, settings: Mqtt) -> aiomqtt.Client:
        try:
            import aiomqtt
        except ImportError:
            raise MqttError("needs the extra `mqtt`: pip install 'stillbrine[mqtt]'") from None
        name, password = self._secrets(settings)
        return aiomqtt.Client(
            settings.host,
            settings.port,
            username=name,
            password=password,
            protocol=aiomqtt.ProtocolVersion.V5,
            will=aiomqtt.Will(f"{settings.topic}/service", "offline", qos=1, retain=True),
            tls_context=self._tls(settings),
            keepalive=KEEPALIVE_S,
            timeout=ANSWER_S,
        )

    def _tls(self, settings: Mqtt) -> ssl.SSLContext | None:
        if not settings.tls:
            return None
        file = settings.ca_file and self._near / Path(settings.ca_file).expanduser()
        try:
            return ssl.create_default_context(cafile=file)
        except OSError as wrong:
            said = wrong.strerror or "no certificate"
            raise MqttError(f"ca_file: {said}; expected certificates (PEM)") from None

    def _secrets(self, settings: Mqtt) -> tuple[str | None, str | None]:
        if settings.secrets_file is None:
            return None, None
        path = self._near / Path(settings.secrets_file).expanduser()
        try:
            table = tomllib.loads(secret(path))
        except PlaceError as wrong:
            raise MqttError(str(wrong)) from None
        except tomllib.TOMLDecodeError:
            raise MqttError(
                f'{path.name}: expected username = "..." and password = "..."'
            ) from None
        name, password = table.get("username"), table.get("password")
        if not (isinstance(name, str) and isinstance(password, str)):
            raise MqttError(f'{path.name}: expected username = "..." and password = "..."')
        return name, password


async def _until_lost(client: aiomqtt.Client) -> None:
    async for _ in client.messages:
        pass  # nothing is subscribed to, so nothing comes; it raises when the broker is gone


def _why(wrong: BaseException) -> str:
    cause = wrong.__cause__ or wrong.__context__ or wrong
    if isinstance(cause, ssl.SSLCertVerificationError):
        return "its certificate is not trusted"
    if isinstance(cause, OSError) and cause.errno:
        return str(cause.strerror)
    return str(wrong)[:120] or type(wrong).__name__


class Minute:
    """One minute of one probe, summed from its judged seconds."""

    def __init__(self, number: int) -> None:
        self.number = number
        self._values: list[float] = []
        self._readings = 0
        self._now: dict[str, Any] = {}

    def add(self, second: Second, judges: Judges) -> None:
        """Take one judged second."""
        trust, settling = judges.trust, judges.settling
        self._readings += second.n_rows
        if trust.usable and not math.isnan(second.salinity_pct):
            self._values.append(second.salinity_pct)
        if second.k % 60 == 59 or not self._now:
            self._now = {
                "tank": next(iter(judges.bench.probe.values())).tank,
                "u95_pct": _figure(settling.u95_pct),
                "temp_c": _figure(second.temp_used_c),
                "belief": "out" if trust.out else trust.belief,
                "moving": settling.moving,
                "faults": sorted(trust.faults),
            }

    def figures(self) -> dict[str, Any]:
        """The summary; null where no reading was usable."""
        values = self._values
        mean = sum(values) / len(values) if values else math.nan
        return {
            "salinity_pct": _figure(mean),
            "low_pct": _figure(min(values, default=math.nan)),
            "high_pct": _figure(max(values, default=math.nan)),
            "readings": self._readings,
            **self._now,
        }


def _figure(value: float) -> float | None:
    return float(f"{value:.6g}") if math.isfinite(value) else None

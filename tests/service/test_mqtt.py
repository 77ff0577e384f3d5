"""Publishing to a real broker on loopback: retained state, last will, queue, reconnect, TLS."""

from __future__ import annotations

import asyncio
import json
from pathlib import Path

import pytest

from monitor import mqtt
from monitor.bench import Bench, parse
from monitor.findings import Finding
from monitor.mqtt import Publisher
from tests.service.broker import Broker, broker, listener, mosquitto, secrets
from tests.service.running import OnPtys, running, until

pytestmark = pytest.mark.broker

HUM: Finding = {"finding": "fault", "probe": "p1", "t": 60.0, "fault": "hum", "evidence": "\x1b[2J"}


@pytest.fixture(autouse=True)
def _there() -> None:
    mosquitto()


@pytest.fixture(autouse=True)
def _soon_again(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(mqtt, "AGAIN_S", (0.05, 0.2))


def bench(
    server: Broker, folder: Path, more: str = "tls = false\n", host: str = "127.0.0.1"
) -> Bench:
    path = secrets(folder)
    table = f'[mqtt]\nhost = "{host}"\nport = {server.port}\nsecrets_file = "{path.name}"\n'
    return parse(table + more)


class Publishing:
    def __init__(self, folder: Path) -> None:
        self.said: list[str] = []
        self.publisher = Publisher(folder / "bench.toml", folder, self.said.append)

    async def until_said(self, text: str) -> None:
        async with asyncio.timeout(20):
            while not any(text in said for said in self.said):
                await asyncio.sleep(0.02)


async def test_findings_arrive_and_the_last_will_is_offline(tmp_path: Path) -> None:
    with broker(tmp_path / "b") as server:
        made = Publishing(tmp_path)
        made.publisher.hang(bench(server, tmp_path))
        async with listener(server.port) as heard:
            made.publisher.take(HUM)
            made.publisher.take({"finding": "unwatched", "tank": "t1", "t": 9.0})
            (told,) = await heard.until("stillbrine/probe/p1/finding")
            assert json.loads(told) == {**HUM}
            assert "\x1b" not in told
            await heard.until("stillbrine/tank/t1/finding")
            await heard.until("stillbrine/service")
            await made.publisher.close()
            await heard.until("stillbrine/service", 2)
            assert heard.of("stillbrine/service") == ["online", "offline"]
        async with listener(server.port) as late:
            await late.until("stillbrine/service")
            assert late.got == [("stillbrine/service", "offline", True)]


async def test_what_happens_while_the_broker_is_away_arrives_later_and_in_order(
    tmp_path: Path,
) -> None:
    server = Broker(tmp_path / "b")
    made = Publishing(tmp_path)
    made.publisher.hang(bench(server, tmp_path))
    for n in range(50):
        made.publisher.take({**HUM, "t": float(n)})
    await made.until_said("Connection refused; tried again")
    await made.publisher.close()  # and a restart
    again = Publishing(tmp_path)
    again.publisher.hang(bench(server, tmp_path))
    for n in range(50, 60):
        again.publisher.take({**HUM, "t": float(n)})
    server.start()
    try:
        async with listener(server.port) as heard:
            told = await heard.until("stillbrine/probe/p1/finding", 60)
            times = [json.loads(each)["t"] for each in told]
            assert sorted(set(times)) == [float(n) for n in range(60)]
            assert [t for i, t in enumerate(times) if t not in times[:i]] == sorted(set(times))
        server.stop()
        again.publisher.take({**HUM, "t": 60.0})
        await asyncio.sleep(0.3)
        server.start()
        async with listener(server.port) as heard:
            await heard.until("stillbrine/probe/p1/finding")
        assert sum("tried again" in each for each in again.said) <= 4  # said once each time
    finally:
        await again.publisher.close()
        server.stop()


# the library leaves a socket whose handshake failed to the garbage collector
@pytest.mark.filterwarnings("ignore:.*ssl.SSLSocket:pytest.PytestUnraisableExceptionWarning")
async def test_tls_is_verified_and_secrets_are_never_said(tmp_path: Path) -> None:
    with broker(tmp_path / "b", tls=True) as server:
        made = Publishing(tmp_path)
        trusted = f'ca_file = "{tmp_path}/b/server.pem"\n'
        made.publisher.hang(bench(server, tmp_path, "", "localhost"))
        await made.until_said("its certificate is not trusted")
        made.publisher.hang(bench(server, tmp_path, trusted, "127.0.0.1"))
        await made.until_said(f"127.0.0.1:{server.port}: its certificate is not trusted")
        made.publisher.hang(bench(server, tmp_path, trusted, "localhost"))
        await made.until_said("publishing to localhost")
        wrong = bench(server, tmp_path, trusted + 'topic = "x"\n', "localhost")
        secrets(tmp_path, "wrong")
        made.publisher.hang(wrong)
        await made.until_said("uthori")
        (tmp_path / "broker.secrets").chmod(0o644)
        await made.until_said("open to others; expected your own, of mode 0600")
        (tmp_path / "broker.secrets").write_text("password = [")
        (tmp_path / "broker.secrets").chmod(0o600)
        await made.until_said('expected username = "..."')
        await made.publisher.close()
        assert not [said for said in made.said if "correct" in said or "wrong" in said]


async def test_a_running_service_publishes_and_its_death_is_noticed(tmp_path: Path) -> None:
    with broker(tmp_path / "b") as server, OnPtys(tmp_path) as ptys:
        table = f'[mqtt]\nhost = "127.0.0.1"\nport = {server.port}\ntls = false\n'
        ptys.write(f'{table}secrets_file = "{secrets(tmp_path).name}"\ntopic = "room/north"\n')
        async with listener(server.port) as heard:
            with running(ptys, tmp_path) as run:
                await heard.until("room/north/service", 1, 30)
                ptys.do(lambda: ptys.virtual.fault("p1", "short"))
                await heard.until("room/north/probe/p1/finding", 3, 40)
                minute = json.loads((await heard.until("room/north/probe/p1/minute", 1, 90))[0])
                assert {"probe", "tank", "utc", "salinity_pct", "u95_pct", "belief"} <= set(minute)
                assert minute["readings"] > 100
                run.process.kill()
                await heard.until("room/north/service", 2, 60)
            assert heard.of("room/north/service") == ["online", "offline"]
            told = {json.loads(each)["finding"] for each in heard.of("room/north/probe/p1/finding")}
            assert told <= {json.loads(each)["finding"] for each in run.told}
        async with listener(server.port) as late:
            (state,) = await late.until("room/north/probe/p1/state")
            assert json.loads(state) == minute
        until(lambda: run.process.poll() is not None)

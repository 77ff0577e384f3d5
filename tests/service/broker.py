"""A real mosquitto on loopback, with a password and, if wanted, TLS; and one who listens."""

from __future__ import annotations

import asyncio
import shutil
import socket
import subprocess
import time
from collections.abc import AsyncIterator, Iterator
from contextlib import asynccontextmanager, contextmanager
from dataclasses import dataclass, field
from pathlib import Path

import aiomqtt
import pytest

NAME, PASSWORD = "bench", "correct horse"


def mosquitto() -> str:
    """Path of the broker; skips where there is none."""
    found = shutil.which("mosquitto", path="/usr/sbin:/usr/local/sbin:/usr/bin:/usr/local/bin")
    if found is None or shutil.which("mosquitto_passwd") is None:
        pytest.skip("no mosquitto on this machine (apt-get install mosquitto)")
    return found


class Broker:
    """Can be started and stopped; keeps its port."""

    def __init__(self, folder: Path, tls: bool = False) -> None:
        self.program = mosquitto()
        self.folder = folder
        folder.mkdir()
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            self.port = probe.getsockname()[1]
        passwords = folder / "passwords"
        line = ["mosquitto_passwd", "-b", "-c", str(passwords), NAME, PASSWORD]
        subprocess.run(line, check=True, capture_output=True)
        passwords.chmod(0o644)
        folder.chmod(0o755)
        text = f"listener {self.port} 127.0.0.1\nallow_anonymous false\npassword_file {passwords}\n"
        if tls:
            certificate(folder)
            text += f"certfile {folder}/server.pem\nkeyfile {folder}/server.key\n"
        (folder / "broker.conf").write_text(text + "user root\n")
        self._process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        """Listen."""
        with (self.folder / "broker.log").open("ab") as log:
            line = [self.program, "-c", str(self.folder / "broker.conf")]
            self._process = subprocess.Popen(line, stdout=log, stderr=log)
        end = time.monotonic() + 10
        while True:
            try:
                socket.create_connection(("127.0.0.1", self.port), 1).close()
                return
            except OSError:
                assert time.monotonic() < end, (self.folder / "broker.log").read_text()
                time.sleep(0.05)

    def stop(self) -> None:
        """Away."""
        if self._process is not None:
            self._process.terminate()
            self._process.wait()
            self._process = None


@contextmanager
def broker(folder: Path, tls: bool = False) -> Iterator[Broker]:
    made = Broker(folder, tls)
    made.start()
    try:
        yield made
    finally:
        made.stop()


def certificate(folder: Path) -> None:
    """A certificate of localhost, signed by itself."""
    if shutil.which("openssl") is None:
        pytest.skip("no openssl on this machine")
    line = ["openssl", "req", "-x509", "-newkey", "rsa:2048", "-nodes", "-days", "2"]
    line += ["-keyout", f"{folder}/server.key", "-out", f"{folder}/server.pem"]
    line += ["-subj", "/CN=localhost", "-addext", "subjectAltName=DNS:localhost"]
    subprocess.run(line, check=True, capture_output=True)
    (folder / "server.key").chmod(0o644)


def secrets(folder: Path, password: str = PASSWORD) -> Path:
    """The file of name and password."""
    path = folder / "broker.secrets"
    path.write_text(f'username = "{NAME}"\npassword = "{password}"\n')
    path.chmod(0o600)
    return path


@dataclass
class Listener:
    """All messages that came, as (topic, payload, retained)."""

    got: list[tuple[str, str, bool]] = field(default_factory=list)

    def of(self, topic: str) -> list[str]:
        """Payloads of this topic."""
        return [payload for where, payload, _ in self.got if where == topic]

    async def until(self, topic: str, n: int = 1, limit_s: float = 20.0) -> list[str]:
        """Wait for n messages of this topic."""
        async with asyncio.timeout(limit_s):
            while len(self.of(topic)) < n:
                await asyncio.sleep(0.02)
        return self.of(topic)


@asynccontextmanager
async def listener(port: int) -> AsyncIterator[Listener]:
    heard = Listener()
    version = aiomqtt.ProtocolVersion.V5
    async with aiomqtt.Client(
        "127.0.0.1", port, username=NAME, password=PASSWORD, protocol=version
    ) as client:
        await client.subscribe("#", qos=1)

        async def listen() -> None:
            async for message in client.messages:
                payload = message.payload
                assert isinstance(payload, bytes)
                heard.got.append((str(message.topic), payload.decode(), bool(message.retain)))

        task = asyncio.create_task(listen())
        try:
            yield heard
        finally:
            task.cancel()
            await asyncio.gather(task, return_exceptions=True)

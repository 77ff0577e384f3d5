"""sd_notify(3) of systemd: NOTIFY_SOCKET as a path or abstract name, WATCHDOG_USEC."""

from __future__ import annotations

import os
import socket
from pathlib import Path

import pytest

from monitor.supervisor import notify, watchdog_s


@pytest.mark.parametrize("abstract", [False, True])
def test_state_is_sent(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, abstract: bool) -> None:
    name = f"stillbrine-test-{os.getpid()}" if abstract else str(tmp_path / "notify")
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as to:
        to.bind("\0" + name if abstract else name)
        monkeypatch.setenv("NOTIFY_SOCKET", "@" + name if abstract else name)
        assert notify("READY=1")
        assert to.recv(100) == b"READY=1"


@pytest.mark.parametrize("address", ["", "elsewhere", "/nobody/listens/here"])
def test_nobody_asked(monkeypatch: pytest.MonkeyPatch, address: str) -> None:
    monkeypatch.setenv("NOTIFY_SOCKET", address)
    assert not notify("READY=1")


def test_watchdog(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("WATCHDOG_PID", raising=False)
    for period, every_s in (("30000000", 15.0), ("", None), ("0", None), ("-5", None)):
        monkeypatch.setenv("WATCHDOG_USEC", period)
        assert watchdog_s() == every_s
    monkeypatch.setenv("WATCHDOG_USEC", "30000000")
    monkeypatch.setenv("WATCHDOG_PID", "1")
    assert watchdog_s() is None
    monkeypatch.setenv("WATCHDOG_PID", str(os.getpid()))
    assert watchdog_s() == 15.0

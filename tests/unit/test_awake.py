"""The machine is asked not to sleep while the service records, and let go afterwards."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from monitor.supervisor import kept_awake

INHIBIT = """#!/bin/sh
echo "$@" > "$0.asked"
while [ "$1" != cat ]; do shift; done
cat
echo over > "$0.over"
"""


@pytest.fixture
def inhibitor(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A stand-in for systemd-inhibit that notes what it was asked and when it ended."""
    path = tmp_path / "systemd-inhibit"
    path.write_text(INHIBIT)
    path.chmod(0o700)
    monkeypatch.setenv("PATH", f"{tmp_path}:/usr/bin:/bin")
    return path


def appears(path: Path) -> bool:
    end = time.monotonic() + 10
    while not path.exists() and time.monotonic() < end:
        time.sleep(0.02)
    return path.exists()


def test_it_is_held_for_the_block(inhibitor: Path) -> None:
    asked, over = Path(f"{inhibitor}.asked"), Path(f"{inhibitor}.over")
    with kept_awake() as held:
        assert held
        assert appears(asked)
        assert not over.exists()
    assert over.exists()
    assert "--what=sleep:idle" in asked.read_text()
    assert "--mode=block" in asked.read_text()


def test_it_is_let_go_when_the_service_is_killed(inhibitor: Path) -> None:
    code = (
        "from monitor.supervisor import kept_awake; import time\nwith kept_awake(): time.sleep(60)"
    )
    process = subprocess.Popen([sys.executable, "-c", code])
    assert appears(Path(f"{inhibitor}.asked"))
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    assert appears(Path(f"{inhibitor}.over"))


def test_without_one_nothing_is_asked(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("PATH", str(tmp_path))
    with kept_awake() as held:
        assert not held

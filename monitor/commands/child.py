"""A service in a process of its own: started, waited for, ended, and told of if it fails."""

from __future__ import annotations

import signal
import subprocess
import tempfile
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import IO, Any

from monitor.commands import Refusal, Wrong

MAIN = "from monitor.cli import main; main()"  # what `python -c` needs to be `stillbrine`
START_S = 15.0  # until a service that was started must answer
END_S = 10.0  # until one that was told to end must have ended


@contextmanager
def child(command_line: Sequence[str], socket: Path) -> Iterator[subprocess.Popen[bytes]]:
    """A service in a process of its own, ended with the block; its standard input is a pipe.

    Raises Refusal or Wrong if it ends before it answers at this socket, or failed later.
    """
    with tempfile.TemporaryFile() as said:
        process = subprocess.Popen(
            command_line,
            stdin=subprocess.PIPE,
            stdout=subprocess.DEVNULL,
            stderr=said,
            start_new_session=True,  # the terminal's Ctrl-C is for the screen
        )
        try:
            _load_meanwhile()
            if not _answers(process, socket):
                _end(process)
                raise _failure(process.returncode, said)
            yield process
        finally:
            _end(process)
        if process.returncode not in (0, -signal.SIGTERM):
            raise _failure(process.returncode, said)


def _load_meanwhile() -> None:
    """What the screen needs takes as long to load as a service to start: both at once."""
    import monitor.screen.app
    import monitor.screen.followed  # noqa: F401


def _answers(process: subprocess.Popen[bytes], socket: Path) -> bool:
    """Wait until the service answers; False if it ends, or does not in good time."""
    until = time.monotonic() + START_S
    while process.poll() is None and time.monotonic() < until:
        if status(socket) is not None:
            return True
        time.sleep(0.03)
    return False


def _end(process: subprocess.Popen[bytes]) -> None:
    process.terminate()
    if process.stdin is not None:
        process.stdin.close()
    try:
        process.wait(END_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()


def _failure(code: int, said: IO[bytes]) -> Exception:
    """What a service that failed said last."""
    from monitor.printable import printable

    said.seek(0)
    lines = [line for line in said.read().decode(errors="replace").splitlines() if line.strip()]
    last = lines[-1].removeprefix("stillbrine: ") if lines else f"exit code {code}"
    shown = printable(last, 400)
    return Wrong(shown) if code == 2 else Refusal(f"the service ended: {shown}")


def status(socket: Path) -> dict[str, Any] | None:
    """What the service at this socket says of its probes; None if there is none."""
    from monitor.control import ControlError, give_now

    if not socket.exists():
        return None
    try:
        return give_now(socket, "status", {})
    except ControlError:
        return None

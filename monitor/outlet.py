"""Findings to standard output, messages to standard error, from a thread of their own.

Whoever reads our output may stop reading; the recording must not wait for them. At most QUEUE
lines wait; what does not fit is counted and said.
"""

from __future__ import annotations

import os
import queue
import sys
import threading
from types import TracebackType
from typing import TextIO

from monitor.findings import Finding, line
from monitor.printable import printable

QUEUE = 10_000
MESSAGE_MOST = 400


class Outlet:
    """A context manager; `finding` and `message` never block."""

    def __init__(self) -> None:
        self._waiting: queue.Queue[tuple[bool, str] | None] = queue.Queue(QUEUE)
        self._lost = 0
        self._thread = threading.Thread(target=self._write, name="outlet", daemon=True)

    def __enter__(self) -> Outlet:
        self._thread.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        wrong: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        try:
            self._waiting.put(None, timeout=1)
        except queue.Full:
            return
        self._thread.join(timeout=2)
        _let_go(sys.stdout)
        _let_go(sys.stderr)

    def finding(self, finding: Finding) -> None:
        """Print a finding on standard output."""
        self._put(True, line(finding))

    def message(self, text: str) -> None:
        """Print a message on standard error, made safe for a terminal."""
        self._put(False, printable(text, MESSAGE_MOST))

    def _put(self, out: bool, text: str) -> None:
        try:
            self._waiting.put_nowait((out, text))
        except queue.Full:
            self._lost += 1

    def _write(self) -> None:
        while (item := self._waiting.get()) is not None:
            out, text = item
            if self._lost and not self._waiting.qsize():
                lost, self._lost = self._lost, 0
                _print(f"{lost} lines could not be printed in time", sys.stderr)
            _print(text, sys.stdout if out else sys.stderr)


def _print(text: str, to: TextIO) -> None:
    try:
        print(text, file=to, flush=True)
    except (OSError, ValueError):
        pass  # nobody reads; the findings file beside the log has it all


def _let_go(stream: TextIO) -> None:
    """What is left in a pipe that nobody reads must not be an error at exit."""
    try:
        stream.flush()
    except (OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())

"""The screen in a terminal of ours: it comes up, and leaves everything as it was."""

from __future__ import annotations

import os
import signal
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from monitor.commands.child import MAIN
from tests.screen import invented
from tests.screen.pace import Terminal

LEAVES = (b"\x1b[?1049l", b"\x1b[?25h", b"\x1b[?1000l", b"\x1b[?1006l")  # screen, cursor, mouse


@pytest.fixture
def replay(tmp_path: Path) -> Iterator[Callable[..., Terminal]]:
    """Starts a replay in a terminal of this size."""
    log = invented.saved(tmp_path, invented.log_text(invented.bench(label="north"), length_s=90.0))
    begun: list[Terminal] = []

    def make(columns: int = 80, rows: int = 24, **env: str) -> Terminal:
        line = [sys.executable, "-c", MAIN, "replay", log, "--speed", "3600"]
        begun.append(Terminal(line, columns, rows, env))
        return begun[-1]

    yield make
    for terminal in begun:
        terminal.process.kill()
        terminal.process.wait()
        terminal.close()


@pytest.mark.parametrize("size", [(40, 12), (80, 24), (200, 60)])
@pytest.mark.parametrize("how", [b"q", b"\x03", signal.SIGTERM, signal.SIGINT, signal.SIGHUP])
def test_quitting_leaves_the_terminal_as_it_was(
    replay: Callable[..., Terminal], size: tuple[int, int], how: bytes | signal.Signals
) -> None:
    terminal = replay(*size)
    before = terminal.settings
    assert terminal.read(time.monotonic() + 30, (b"north",))[1] is not None
    assert terminal.settings != before  # keys come singly
    if isinstance(how, bytes):
        os.write(terminal.ours, how)
    else:
        terminal.process.send_signal(how)
    terminal.read(time.monotonic() + 10, (b"\x1b[?2004l",))
    terminal.read(time.monotonic() + 10)
    assert terminal.process.wait(10) == 0
    assert all(code in terminal.drawn for code in LEAVES)
    assert b"Traceback" not in terminal.drawn
    assert terminal.settings == before


def test_it_ends_where_the_terminal_is_gone_without_a_word(
    replay: Callable[..., Terminal],
) -> None:
    terminal = replay()
    assert terminal.read(time.monotonic() + 30, (b"north",))[1] is not None
    os.write(terminal.ours, b"u")
    terminal.close()
    assert terminal.process.wait(30) == 0


def test_a_dumb_terminal_gets_plain_lines(replay: Callable[..., Terminal]) -> None:
    terminal = replay(TERM="dumb")
    terminal.read(time.monotonic() + 30, (b"at the end", b"quiet"))
    assert terminal.process.wait(20) == 0
    terminal.read(time.monotonic() + 2)
    assert b"\x1b" not in terminal.drawn
    assert b"north: 0.0" in terminal.drawn


def test_without_colour_no_colour_is_sent(replay: Callable[..., Terminal]) -> None:
    terminal = replay(NO_COLOR="1")
    terminal.read(time.monotonic() + 30, (b"north",))
    terminal.read(time.monotonic() + 1)
    codes = terminal.drawn.split(b"\x1b[")
    colours = [code for code in codes if code.partition(b"m")[1] and _is_colour(code)]
    assert not colours, colours[:5]


def _is_colour(code: bytes) -> bool:
    """Whether this rest of an escape sequence sets a colour."""
    figures = code.partition(b"m")[0]
    if not figures or not all(part.isdigit() for part in figures.split(b";")):
        return False
    numbers = [int(part) for part in figures.split(b";")]
    return any(n in (38, 48) or 30 <= n <= 37 or 40 <= n <= 47 or 90 <= n <= 107 for n in numbers)

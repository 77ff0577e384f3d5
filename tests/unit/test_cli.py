"""The command line: one line for what is wrong, the right exit code, an example in every help."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from monitor.cli import COMMANDS

PROGRAM = str(Path(sys.executable).with_name("stillbrine"))


def run(*words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([PROGRAM, *words], capture_output=True, text=True, timeout=60)


@pytest.mark.parametrize("command", COMMANDS)
def test_the_help_of_each_command_shows_an_example(command: str) -> None:
    said = run(command, "--help")
    assert said.returncode == 0
    assert "stillbrine " in said.stdout
    assert command == "tell" or "Example" in said.stdout


@pytest.mark.parametrize(
    "words",
    [
        ("nope",),
        ("salinity", "--bench", "x"),
        ("salinity", "--bench", "/nope.toml", "--probe", "p1", "500"),
        ("salinity", "--bench", "x", "--probe", "p1", "--temp", "warm", "500"),
        ("replay", "/nope.log", "--findings"),
        ("replay", "/etc/hostname", "--findings"),
        ("replay", "/tmp", "--findings"),
        ("check", "/nope.toml"),
        ("run", "--bench", "/nope.toml"),
        ("report",),
        ("tell",),
        ("dose", "--bench", "/nope.toml", "--tank", "t1", "--from", "1"),
    ],
)
def test_what_is_wrong_is_one_line_and_exit_2(words: tuple[str, ...]) -> None:
    said = run(*words)
    assert said.returncode == 2
    assert said.stdout == ""
    assert len(said.stderr.splitlines()) == 1
    assert "expected" in said.stderr


def test_without_a_word_it_shows_its_help() -> None:
    said = run()
    assert said.returncode == 0
    assert all(command in said.stdout for command in COMMANDS)

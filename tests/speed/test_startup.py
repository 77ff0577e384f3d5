"""What a start may load: time at the prompt is time of imports."""

from __future__ import annotations

import subprocess
import sys
from importlib import import_module
from pathlib import Path

import pytest

from monitor.cli import COMMANDS
from tests.speed.logs import night

LOADED = """
import sys
from monitor.cli import main
sys.argv[0] = "stillbrine"
try:
    main()
except SystemExit as end:
    assert not end.code, end.code
print("loaded", *sorted(sys.modules), file=sys.stderr)
"""
HEAVY = {"scipy", "asyncio", "textual", "rich", "pandas", "gsw", "serial", "distributed"}


def loaded(*args: str) -> set[str]:
    """Packages that a run of the command line has loaded."""
    ran = subprocess.run(
        [sys.executable, "-c", LOADED, *args], capture_output=True, text=True, check=True
    )
    last = ran.stderr.splitlines()[-1]
    assert last.startswith("loaded ")
    return {name.partition(".")[0] for name in last.split()[1:]} | set(last.split()[1:])


@pytest.mark.parametrize("name", COMMANDS)
def test_the_list_of_commands_says_what_each_says_itself(name: str) -> None:
    module = import_module(f"monitor.commands.{name}")
    text = module.command.__doc__ if hasattr(module, "command") else module.app.info.help
    assert text.splitlines()[0] == COMMANDS[name]


def test_help_loads_nothing_that_computes() -> None:
    assert not loaded("--help") & (HEAVY | {"numpy", "pydantic"})
    assert "monitor.commands.replay" not in loaded("--help")
    assert not loaded("replay", "--help") & (HEAVY | {"numpy", "pydantic"})


def test_a_replay_loads_only_what_judges(tmp_path: Path) -> None:
    log = tmp_path / "p1.log"
    bench = night(log, rate_hz=2.0, hours=0.6, doses=1)
    packages = loaded("replay", str(log), "--bench", str(bench), "--findings")
    assert {"numpy", "pydantic", "monitor.chain"} <= packages
    assert not packages & HEAVY


def test_salinity_loads_no_scipy(tmp_path: Path) -> None:
    bench = night(tmp_path / "p1.log", rate_hz=1.0, hours=0.1, doses=0)
    assert not loaded("salinity", "--bench", str(bench), "--probe", "p1", "585.5") & HEAVY

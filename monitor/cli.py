"""The command line: names of the commands and what becomes of their refusals.

Exit codes: 0 done; 1 it ran and the answer is a refusal or a failed check; 2 the command or a file
is wrong. Either way one line on standard error, never a traceback.
"""

from __future__ import annotations

import os
import sys
from importlib import import_module
from typing import Any

import typer
import typer.main
from typer.core import TyperGroup

from monitor.commands import Refusal, Wrong

COMMANDS = {  # each a module of monitor.commands; the first line of its help
    "demo": "Three virtual tanks on real serial lines, recorded and judged like any bench.",
    "watch": "Watch a bench: attach to the service that records it, or start one while this is"
    " open.",
    "run": "Record and judge every probe of a bench, unattended; findings on standard output.",
    "replay": "Play recorded logs on the screen, or print what was found in them.",
    "report": "Say what happened in the night, most important first.",
    "handover": "Say what is open: doses not at rest, faults, silences, questions, checks, notes.",
    "export": "Print a stretch of a log as CSV, judged: a row a second.",
    "calibrate": "Take standards with a live probe, fit them, and write them into the bench file.",
    "verify": "Compare a check standard with the calibration, keep it, and say what the checks"
    " say.",
    "salinity": "Convert periods to salinities, with their doubt.",
    "standards": "Plan standards from a stock and pure water: what to weigh or measure, how well"
    " it is known.",
    "dose": "Plan a dose: which liquid, how much, how long to open, where it lands and how surely.",
    "valve": "Find a valve's flow from its timed runs, with its doubt, and what to mistrust in"
    " them.",
    "tell": "Tell a running service what was done: a dose, water, a probe taken out, a note.",
    "ports": "List the serial ports that are plugged in, by the name that survives a reboot.",
    "check": "Check a bench file, its ports, and whether a failure in the night would be noticed.",
}


_USAGE: Any = typer.BadParameter.__bases__[0]  # whichever copy of click typer stands on


class _Commands(TyperGroup):
    """Imports and builds the one command that is called: the others would cost each start."""

    def list_commands(self, ctx: Any) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: Any, cmd_name: str) -> Any:
        if cmd_name not in COMMANDS:
            return None
        module = import_module(f"monitor.commands.{cmd_name}")
        if hasattr(module, "app"):  # it has commands of its own
            return typer.main.get_command(module.app)
        alone = typer.Typer(
            add_completion=False, rich_markup_mode=None, pretty_exceptions_enable=False
        )
        alone.command(cmd_name)(module.command)
        return typer.main.get_command(alone)

    def format_commands(self, ctx: Any, formatter: Any) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


app = typer.Typer(
    cls=_Commands,
    name="stillbrine",
    help="Has the tank come to rest, where, with how much doubt, and can the probe be believed?",
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)
app.callback()(lambda: None)


def main() -> None:
    """Run the command line; the entry point of `stillbrine`."""
    # Nothing here has matrices worth a thread; to start a pool of them takes half of NumPy's start
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    # No plugin of pydantic is wanted; to look for one reads every installed package's metadata
    os.environ.setdefault("PYDANTIC_DISABLE_PLUGINS", "1")
    if len(sys.argv) == 1:
        sys.argv.append("--help")
    try:
        sys.exit(app(standalone_mode=False) or 0)
    except Refusal as refusal:
        _say(str(refusal), 1)
    except Wrong as wrong:
        _say(str(wrong), 2)
    except _USAGE as wrong:
        command = wrong.ctx.command_path if wrong.ctx is not None else "stillbrine"
        _say(f"{wrong.format_message().rstrip('.')}; expected as in {command} --help", 2)
    except (typer.Abort, KeyboardInterrupt):
        sys.exit(130)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())  # nothing left to flush to
        sys.exit(0)


def _say(said: str, code: int) -> None:
    from monitor.printable import printable

    print(f"stillbrine: {printable(said, 600)}", file=sys.stderr)
    sys.exit(code)

"""The command line: names of the commands and what becomes of their refusals.

Exit codes: 0 done; 1 it ran and the answer is a refusal or a failed check; 2 the command or a file
is wrong. Either way one line on standard error, never a traceback.
"""

from __future__ import annotations

import sys

import typer

from monitor.commands import (
    Refusal,
    Wrong,
    calibrate,
    check,
    demo,
    dose,
    export,
    handover,
    ports,
    replay,
    report,
    run,
    salinity,
    standards,
    valve,
    verify,
    watch,
)

app = typer.Typer(
    name="stillbrine",
    help="Has the tank come to rest, where, with how much doubt, and can the probe be believed?",
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)
for name, module in {
    "demo": demo,
    "watch": watch,
    "run": run,
    "replay": replay,
    "report": report,
    "handover": handover,
    "export": export,
    "calibrate": calibrate,
    "verify": verify,
    "salinity": salinity,
    "standards": standards,
    "dose": dose,
    "valve": valve,
    "ports": ports,
    "check": check,
}.items():
    app.command(name)(module.command)


def main() -> None:
    """Run the command line; the entry point of `stillbrine`."""
    try:
        app(standalone_mode=True)
    except Refusal as refusal:
        _say(refusal, 1)
    except Wrong as wrong:
        _say(wrong, 2)
    except BrokenPipeError:
        sys.exit(0)


def _say(said: Exception, code: int) -> None:
    print(f"stillbrine: {said}", file=sys.stderr)
    sys.exit(code)

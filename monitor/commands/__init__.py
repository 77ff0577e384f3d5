"""The commands, a module each. They import typer and nothing heavy until they run.

A command raises Refusal where it ran and the answer is no (exit 1), Wrong where the command line
or a file is wrong (exit 2); `monitor.cli` turns either into one line.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from monitor.bench import Bench


class Refusal(Exception):
    """It ran, and the answer is a refusal or a failed check; `str()` is the one line to show."""


class Wrong(Exception):
    """The command line or a file is wrong; `str()` is the one line to show."""


def load_bench(path: Path) -> Bench:
    """The bench file at this path, checked. Raises Wrong."""
    from monitor.bench import MAX_BYTES, BenchError, parse

    try:
        with path.open("rb") as file:
            data = file.read(MAX_BYTES + 1)
        return parse(data.decode(), path.name)
    except OSError as wrong:
        raise Wrong(f"{path}: {wrong.strerror}; expected a readable bench file") from None
    except UnicodeDecodeError as wrong:
        raise Wrong(f"{path}: byte {wrong.start}: not UTF-8; expected TOML text") from None
    except BenchError as wrong:
        raise Wrong(str(wrong)) from None

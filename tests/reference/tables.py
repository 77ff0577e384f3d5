"""The published tables beside the tests, and the line that says which one a test checks."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

DATA = Path(__file__).parent / "data"


def rows(name: str) -> list[dict[str, str]]:
    """Rows of a table, by column."""
    with (DATA / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


def figures(name: str) -> Any:
    """A file of figures."""
    return json.loads((DATA / name).read_text(encoding="utf-8"))


def checks(source: str) -> None:
    """Say which source this test checks (pytest -rP shows it)."""
    print(f"checks against: {source}")

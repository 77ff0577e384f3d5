"""SVG pictures of a screen held against those kept: run with `KEEP_PICTURES=1` to keep new ones."""

from __future__ import annotations

import os
import re
import tempfile
from pathlib import Path

from textual.app import App

KEPT = Path(__file__).parent / "pictures"


def normal(svg: str) -> str:
    """The picture without what is drawn by lot, fonts from elsewhere, and a window's buttons."""
    svg = re.sub(r"terminal-\d+", "terminal", svg)
    svg = re.sub(r"@font-face \{.*?\}", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<!-- Generated .*? -->", "", svg)
    svg = re.sub(r"<circle [^>]*/>", "", svg)
    return "\n".join(line.rstrip() for line in svg.split("\n"))


def holds(app: App[None], name: str) -> bool:
    """Whether the screen looks as it was kept; a differing picture is left for a look."""
    svg = normal(app.export_screenshot(title="stillbrine"))
    kept = KEPT / f"{name}.svg"
    if os.environ.get("KEEP_PICTURES"):
        KEPT.mkdir(exist_ok=True)
        kept.write_text(svg)
    if kept.exists() and kept.read_text() == svg:
        return True
    differs = Path(tempfile.gettempdir()) / f"{name}.differs.svg"
    differs.write_text(svg)
    print(f"differs from {kept}: {differs}")
    return False

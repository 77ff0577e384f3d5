"""Times of day as people give them on the command line."""

from __future__ import annotations

from datetime import datetime

from monitor.commands import Wrong


def local_time(text: str | None, option: str) -> datetime | None:
    """A local time with its offset from text such as 2026-03-14T18:00. Raises Wrong."""
    if text is None:
        return None
    try:
        return datetime.fromisoformat(text).astimezone()
    except ValueError:
        raise Wrong(f"{option}: {text[:40]!r} is no time; expected 2026-03-14T18:00") from None

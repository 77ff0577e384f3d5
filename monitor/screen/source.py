"""Where a screen gets its lanes from: a replay, or logs that are still growing."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from typing import Any, Protocol

from monitor.view import Lane


class ActError(RuntimeError):
    """An act could not be carried out; `str()` is the one line to show."""


class Source(Protocol):
    """What a screen asks of where its data comes from. `poll` is called four times a second."""

    lanes: list[Lane]
    started: datetime  # UTC; where the lanes' times count from
    live: bool  # whether acts can be recorded

    @property
    def now_s(self) -> float:
        """The present on the lanes' time, s."""

    @property
    def trouble(self) -> str:
        """What is wrong with the source itself and needs a person, "" for nothing."""

    @property
    def status(self) -> str:
        """One line on the source itself, "" while there is nothing to say."""

    @property
    def caught_up(self) -> bool:
        """Whether all that is there was read; until then it wants to be polled again at once."""

    def poll(self) -> None:
        """Bring the lanes up to date; takes a few hundredths of a second at most."""

    async def order(
        self, kind: str, fields: Mapping[str, Any], probe: str, ago_s: float = 0.0
    ) -> None:
        """Have an act recorded. Raises ActError."""

    def close(self) -> None:
        """Give back what is held."""


class Playable(Source, Protocol):
    """A source whose time can be driven."""

    speed: float
    playing: bool
    end_s: float

    def seek(self, t: float) -> None:
        """Go on from this time."""

    def next_finding(self) -> None:
        """Run on to the next finding that is worth a look, and stop there."""

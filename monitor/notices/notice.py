"""A notice while it lasts: said once, closed once, answered by a person."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from monitor.findings import Finding

NEAR_S = 1.0  # an answer names the notice by its from_t, rounded


class Open:
    """The notices in force on one probe."""

    def __init__(self, probe: str, tank: str, carried: Mapping[str, Any] | None) -> None:
        self.probe = probe
        self.tank = tank
        self.last: list[Finding] = [dict(each) for each in (carried or {}).get("open", ())]

    def say(
        self, t: float, what: str, from_t: float, value: float, text: str, **more: float
    ) -> list[Finding]:
        """Say a notice that lasts, unless the same is in force; `more`: further fields."""
        if any(
            each["what"] == what and abs(each["from_t"] - from_t) < NEAR_S for each in self.last
        ):
            return []
        said: Finding = {
            "finding": "notice",
            "probe": self.probe,
            "tank": self.tank,
            "t": t,
            "from_t": from_t,
            "to_t": None,
            "what": what,
            "value": value,
            "text": text,
            **more,
        }
        self.last.append(said)
        return [dict(said)]

    def close(self, t: float, what: str, from_t: float | None = None) -> list[Finding]:
        """End the notices of this name, or that one of them which began at from_t."""
        ended = [
            each
            for each in self.last
            if each["what"] == what and (from_t is None or abs(each["from_t"] - from_t) < NEAR_S)
        ]
        self.last = [each for each in self.last if not any(each is one for one in ended)]
        return [{**each, "t": t, "to_t": t} for each in ended]

    def find(self, what: str) -> list[Finding]:
        """Those in force of this name."""
        return [each for each in self.last if each["what"] == what]

    def carry(self) -> dict[str, Any]:
        """The open questions."""
        return {"open": [dict(each) for each in self.last]}

"""All notices of one probe, and the answers to them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from monitor.bench import Bench
from monitor.blocks import Event, Second
from monitor.dosing.ledger import Change, Ledger
from monitor.findings import Finding
from monitor.notices.doses import DoseNotices
from monitor.notices.notice import Open
from monitor.notices.probe import DOUBT, Lift, OtherProbe
from monitor.settling import Settling
from monitor.trust.judge import Trust

MARKS = ("out", "back", "gap")


class Notices:
    """What a person should be asked or told about one probe."""

    def __init__(
        self, probe: str, bench: Bench, tank: str, carried: Mapping[str, Any] | None
    ) -> None:
        carried = carried or {}
        self.open = Open(probe, tank, carried.get("open"))
        self._doses = DoseNotices(self.open, bench, tank)
        self._lift = Lift(self.open)
        self._other = OtherProbe(self.open, carried.get("other"))
        self._was_calm = False

    def step(
        self,
        second: Second,
        changes: Sequence[Change],
        trust: Trust,
        settling: Settling,
        ledger: Ledger,
    ) -> list[Finding]:
        """One closed second: notices begun or ended in it."""
        self._doses.remember(second.t, settling.shown_pct)
        if (
            not second.events
            and self._doses.idle
            and trust.locked
            and self._was_calm
            and not settling.moving
        ):
            found = self._other.step(second, trust, False, False)
            if found:
                trust.doubts = DOUBT
            return found
        self._was_calm = trust.locked and not second.events and not settling.moving
        found = self._answers(second) if second.events else []
        marked = any(event.kind in MARKS for event in second.events)
        moved = bool(changes) or settling.moving or trust.out
        found += self._doses.step(second, changes, trust, settling, ledger)
        told = bool(changes) or settling.heading != 0.0 or trust.out
        found += self._lift.step(second, trust, marked or told)
        found += self._other.step(second, trust, _gap(second.events), moved and not marked)
        trust.doubts = DOUBT if self.open.find("other-probe") else ""
        return found

    def carry(self) -> dict[str, Any]:
        """Open questions, and the last good minute."""
        return {"open": self.open.carry(), "other": self._other.carry()}

    def _answers(self, second: Second) -> list[Finding]:
        found: list[Finding] = []
        for event in second.events:
            if event.kind == "answer":
                from_t = event.fields.get("from_t")
                found += self.open.close(second.t, str(event.fields["of"]), from_t)
            elif event.kind in ("check", "compare"):
                found += self.open.close(second.t, "other-probe")
        return found


def _gap(events: Sequence[Event]) -> bool:
    return any(event.kind == "gap" and event.fields.get("link") == "back" for event in events)

"""The faults in force of one probe: said when they begin, and again, with all fields, at their end.

A fault that hides the water leaves the probe not believed until twelve seconds after its end.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from monitor.findings import Finding

BLIND = ("no-pulses", "short", "stuck", "loose-lead", "lodged-bubble")
BLURRED = ("bubbles", "hum", "fouling")
ADVICE = {
    "bubbles": "tap the probe or slow the air near it",
    "loose-lead": "check plugs and leads",
    "lodged-bubble": "lift or tap the probe to free it",
    "no-pulses": "check power, lead and that the probe is in the water",
    "short": "look for water in the plug or electrodes that touch",
    "stuck": "restart the microcontroller",
    "hum": "look for a pump or heater near the lead; earth it",
}


class InForce:
    """What has been said and has not ended."""

    def __init__(self, probe: str, carried: Sequence[Mapping[str, Any]]) -> None:
        self.probe = probe
        self.said: dict[str, Finding] = {each["fault"]: dict(each) for each in carried}
        self.blinded = ""  # the newest fault that hid the water
        self.blinded_t = -math.inf  # its end

    def __contains__(self, fault: str) -> bool:
        return fault in self.said

    def any_of(self, *faults: str) -> bool:
        """Whether one of these is in force."""
        return any(fault in self.said for fault in faults)

    def begin(self, fault: str, t: float, from_t: float, evidence: str) -> Finding:
        """Say a fault for the first time."""
        self.said[fault] = {
            "finding": "fault",
            "probe": self.probe,
            "t": t,
            "fault": fault,
            "from_t": min(from_t, t),
            "to_t": None,
            "evidence": f"{evidence}; {ADVICE[fault]}",
        }
        return dict(self.said[fault])

    def end(self, fault: str, t: float, to_t: float, withdrawn: str = "") -> Finding:
        """Say that a fault is over, or that it was none."""
        said = self.said.pop(fault)
        if fault in BLIND:
            self.blinded, self.blinded_t = fault, t
        closed = {**said, "t": t, "to_t": min(max(to_t, said["from_t"]), t)}
        return {**closed, "withdrawn": withdrawn} if withdrawn else closed

    def end_all(self, t: float, to_t: float) -> list[Finding]:
        """The probe was taken out: what the quick faults looked at is gone."""
        quick = [fault for fault in self.said if fault in ADVICE]
        return [self.end(fault, t, to_t) for fault in quick]

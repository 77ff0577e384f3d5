"""One word a probe: believed, doubtful, not-believed; and why.

A fault that hides the water makes the probe not believed until twelve seconds of readings after
its end; one that only blurs the level makes it doubtful.
"""

from __future__ import annotations

from collections.abc import Mapping

from monitor.findings import Finding

BLIND = ("no-pulses", "short", "stuck", "loose-lead", "lodged-bubble")
BLURRED = ("bubbles", "hum", "fouling")
RECOVERY_S = 12.0


def word_of(faults: Mapping[str, Finding], recovering: str, doubts: str) -> tuple[str, str]:
    """The word and the reason, from the faults in force.

    `recovering`: what a blind fault that has ended left behind, "" for nothing; `doubts`: what
    else makes the probe doubtful, "" for nothing.
    """
    blind = [name for name in BLIND if name in faults]
    if blind:
        return "not-believed", ", ".join(blind)
    if recovering:
        return "not-believed", recovering
    blurred = [name for name in BLURRED if name in faults]
    if doubts:
        blurred.append(doubts)
    return ("doubtful", ", ".join(blurred)) if blurred else ("believed", "no fault is seen")

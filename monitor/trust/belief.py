"""One word a probe: believed, doubtful, not-believed; and why.

A fault that hides the water makes the probe not believed until twelve seconds of readings after
its end; one that only blurs the level makes it doubtful.
"""

from __future__ import annotations

from monitor.blocks import Second
from monitor.findings import Finding
from monitor.trust.force import BLIND, BLURRED, InForce

RECOVERY_S = 12.0


class Belief:
    """The word in force, and what was said of it."""

    def __init__(self) -> None:
        self.word = "believed"
        self.why = "no fault is seen"
        self.since = 0.0
        self._said = ""

    def step(self, second: Second, force: InForce, doubts: str) -> list[Finding]:
        """One closed second; `doubts`: what else makes the probe doubtful, "" for nothing."""
        t = second.t
        if force.blinded:
            if second.n_rows == second.zeros:
                force.blinded_t = t
            elif t - force.blinded_t >= RECOVERY_S:
                force.blinded = ""
        word, self.why = word_of(force, doubts)
        if word == self._said:
            return []
        self.word = self._said = word
        self.since = t
        return [
            {
                "finding": "belief",
                "probe": force.probe,
                "t": t,
                "belief": word,
                "from_t": t,
                "why": self.why,
            }
        ]


def word_of(force: InForce, doubts: str) -> tuple[str, str]:
    """The word and the reason, from the faults in force."""
    blind = [name for name in BLIND if name in force]
    if blind:
        return "not-believed", ", ".join(blind)
    if force.blinded:
        return "not-believed", f"until {RECOVERY_S:.0f} s after {force.blinded}"
    blurred = [name for name in BLURRED if name in force]
    if doubts:
        blurred.append(doubts)
    return ("doubtful", ", ".join(blurred)) if blurred else ("believed", "no fault is seen")

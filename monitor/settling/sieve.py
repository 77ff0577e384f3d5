"""Which readings count: what the judge of trust says, second by second."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from monitor.blocks import NAN, Second
from monitor.settling.doubt import Doubt
from monitor.trust.judge import Trust

BUBBLES = "bubbles"
NOT_BELIEVED = ("no-pulses", "short", "stuck", "loose-lead", "lodged-bubble")


class Turn(NamedTuple):
    """What a change of trust means for the readings."""

    bad_from_t: float | None  # those since then do not exist
    quiet: bool  # quiet readings begin anew
    back: bool  # the probe was out: nothing is known of the level any more


NO_TURN = Turn(None, False, False)


class Sieve:
    """Follows the trust in one probe."""

    def __init__(self, doubt: Doubt) -> None:
        self.doubt = doubt
        self.calm = True  # believed, and in the water
        self._belief = "believed"
        self._jumpy = False  # bubbles are in force
        self._out = False

    def turn(self, second: Second, trust: Trust) -> Turn:
        """What has changed with this second."""
        belief, out = trust.belief, trust.out
        if self.calm and belief == "believed" and not out:
            return NO_TURN
        bad_from_t, ended, back = None, False, self._out and not out
        jumpy = BUBBLES in trust.faults
        if jumpy and not self._jumpy:
            bad_from_t = _since(trust, (BUBBLES,), second.t)
        if belief != self._belief:
            ended = self._belief == "not-believed"
            if belief == "not-believed":
                bad_from_t = _since(trust, NOT_BELIEVED, second.t)
        self._belief, self._jumpy, self._out = belief, jumpy, out
        self.calm = belief == "believed" and not out
        return Turn(bad_from_t, ended or back, back)

    def reading(self, second: Second, trust: Trust) -> tuple[float, float]:
        """The second's salinity and period, NaN where none counts.

        Under bubbles it is the mean of what lies near the level.
        """
        if not trust.usable or trust.out or trust.belief == "not-believed":
            return NAN, NAN
        if not self._jumpy:
            return second.salinity_pct, second.mean_us
        us = np.exp([trust.level.in_gate_ln])
        salinity = self.doubt.salinity_pct(us, np.array([second.temp_used_c]))
        return float(salinity[0]), float(us[0])


def _since(trust: Trust, faults: Sequence[str], t: float) -> float:
    """When the first of these faults began, and a second before it."""
    began = [trust.faults[name]["from_t"] for name in faults if name in trust.faults]
    return float(min(began, default=t)) - 1.0

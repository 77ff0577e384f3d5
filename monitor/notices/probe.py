"""A probe that was lifted unmarked, and one that came back as another.

- `lift`: the level was left, by silence or rinse water, and found again where it had been.
- `other-probe`: after a gap the first good minute is farther from the last one before than any
  plausible drift; the probe is doubtful until a person or a check answers.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from monitor.blocks import Second
from monitor.findings import Finding
from monitor.notices.notice import Open
from monitor.trust.judge import Trust

SAME_LN = 0.015  # found again so near to where it was left
AWAY_LN = 0.045  # so far away in between, or silent
LIFT_S = (10.0, 1800.0)
LOST_S = 8.0  # the level is given up so long after the last reading on it
MINUTE_S = 30  # locked seconds that make a good minute
DRIFT_LN, DRIFT_LN_PER_H = 0.02, 0.01  # the largest plausible between two good minutes
DOUBT = "another probe?"


class Lift:
    """Watches the level being left and found again."""

    def __init__(self, open_: Open) -> None:
        self._open = open_
        self._left: tuple[float, float] | None = None  # t, level
        self._stood: float | None = None  # the level while locked
        self._away = False  # silent, or other water
        self._rinsed = False  # other water: silence alone may have been a lead's
        self._silences: dict[float, Finding] = {}  # no-pulses said meanwhile, by from_t

    def step(self, second: Second, trust: Trust, explained: bool) -> list[Finding]:
        """One closed second that is not a quiet one."""
        hidden = trust.faults.keys() & {"lodged-bubble", "stuck", "hum", "loose-lead", "short"}
        if explained or hidden:
            self._left = self._stood = None
            self._silences.clear()
            return []
        if not trust.locked:
            if self._left is None and self._stood is not None:
                self._left = (second.t, self._stood)
                self._away = self._rinsed = False
            self._look(second)
            if "no-pulses" in trust.faults:
                fault = trust.faults["no-pulses"]
                self._silences[fault["from_t"]] = {**fault, "to_t": second.t}
            return []
        self._stood = trust.level_ln
        if self._left is None:
            return []
        from_t, level = self._left
        gone_s = second.t - from_t
        off = abs(trust.level_ln - level)
        self._away |= off > AWAY_LN
        self._rinsed |= off > AWAY_LN
        if gone_s > LIFT_S[1] or off > SAME_LN:
            if gone_s > LIFT_S[1] or off <= AWAY_LN:
                self._left = None
                self._silences.clear()
            else:
                self._stood = None  # rinse water: the tank's level is still to come back
            return []
        self._left = None
        if not self._away or gone_s < LIFT_S[0]:
            return []
        text = (
            f"for about {gone_s:.0f} s not the tank's water, then the old value again: was the"
            " probe lifted? mark it with out and back another time"
        )
        said = self._open.say(second.t, "lift", from_t - LOST_S, gone_s, text)
        self._open.close(second.t, "lift", from_t - LOST_S)
        faults = [
            {**fault, "t": second.t, "withdrawn": "the probe was lifted"}
            for fault in self._silences.values()
            if self._rinsed
        ]
        self._silences.clear()
        return faults + [{**each, "to_t": second.t} for each in said]

    def _look(self, second: Second) -> None:
        """Silence, or other water?"""
        if self._left is None:
            return
        if second.n_rows == second.zeros:
            self._away = True
        elif abs(math.log(second.median_us) - self._left[1]) > AWAY_LN:
            self._away = self._rinsed = True


class OtherProbe:
    """Holds the first good minute after a gap against the last one before it."""

    def __init__(self, open_: Open, carried: Mapping[str, Any] | None) -> None:
        self._open = open_
        last = (carried or {}).get("minute")
        self._last: tuple[float, float] | None = tuple(last) if last else None  # t, level
        self._last_t = (carried or {}).get("minute_t")
        self._asked = self._last is not None
        self._good = 0

    def carry(self) -> dict[str, Any]:
        """The last good minute: its level (ln us) and time."""
        if self._last is None:
            return {}
        return {"minute": list(self._last), "minute_t": self._last_t}

    def step(self, second: Second, trust: Trust, gap: bool, moved: bool) -> list[Finding]:
        """One closed second. `gap`: readings may be another probe's from here; `moved`: a dose,
        water or a person changed what is read."""
        if moved:
            self._last, self._asked = None, False
        if gap and self._last is not None:
            self._asked, self._good = True, 0
        if not trust.locked:
            self._good = 0
            return []
        self._good += trust.usable
        if self._good < MINUTE_S:
            return []
        level, before, before_t = trust.level_ln, self._last, self._last_t
        asked, self._asked = self._asked, False
        self._last, self._last_t = (0.0, level), second.t
        if not asked or before is None or before_t is None:
            return []
        away = level - before[1]
        hours = max(second.t - before_t, 0.0) / 3600.0
        if abs(away) <= DRIFT_LN + DRIFT_LN_PER_H * hours:
            return []
        percent = 100.0 * math.expm1(away)
        text = (
            f"after the gap the period is {percent:+.1f} % off what it was: another probe?"
            " answer, or read a check standard"
        )
        return self._open.say(
            second.t,
            "other-probe",
            before_t,
            percent,
            text,
            before_us=math.exp(before[1]),
            after_us=math.exp(level),
        )

"""Check standards: has the probe moved since its calibration, and when is a new one due?

E_n compares one reading of a check standard with what it must be (ISO 13528:2015, 9.7; ISO/IEC
17043, annex B). The filter follows offset and rate of the probe through all checks since the
calibration; the doubt that they have in common (calibration, check standard) is in its start.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from monitor.blocks import Floats

MOVED_ONCE = 1.5  # |E_n| that one check is enough for
MOVED_TWICE = 1.0  # and two running, to the same side
RATE_SD = 5e-4  # relative drift a day, beforehand
WALK_SD = 2e-4  # random walk, relative in sqrt(day)
DUE = 3e-3  # relative offset that is too much
LONGEST_DAYS = 365


@dataclass(frozen=True)
class Check:
    """A check standard as it was read."""

    days: float  # since the calibration
    check_pct: float  # what it is
    check_u_pct: float
    read_pct: float  # what the probe said
    read_u_pct: float  # all of its standard doubt
    noise_u_pct: float  # the part of it that the next reading will not share

    @property
    def e_n(self) -> float:
        """Difference over its expanded uncertainty: beyond +-1 is a failed check."""
        return e_n(self.read_pct, 2 * self.read_u_pct, self.check_pct, 2 * self.check_u_pct)


def e_n(value: float, u95: float, reference: float, reference_u95: float) -> float:
    """E_n score of a value against a reference, both with expanded uncertainties."""
    return (value - reference) / math.hypot(u95, reference_u95)


def zeta(value: float, u: float, reference: float, reference_u: float) -> float:
    """Zeta score: the same with standard uncertainties."""
    return (value - reference) / math.hypot(u, reference_u)


def moved(checks: Sequence[Check]) -> bool:
    """Whether the last checks say that the probe is not what it was."""
    scores = [check.e_n for check in checks]
    if not scores:
        return False
    if abs(scores[-1]) > MOVED_ONCE:
        return True
    return len(scores) > 1 and (min(scores[-2:]) > MOVED_TWICE or max(scores[-2:]) < -MOVED_TWICE)


@dataclass(frozen=True)
class Drift:
    """Where the probe stands against its calibration, relative; `due_days` from the last check."""

    offset: float
    sd: float
    rate_per_day: float
    due_days: float  # 0 = a new calibration is due now

    @property
    def due(self) -> bool:
        """Whether a new calibration is due now."""
        return self.due_days <= 0


def drift(checks: Sequence[Check]) -> Drift | None:
    """Offset and rate after all checks since the calibration, oldest first; None without any."""
    usable = [check for check in checks if check.check_pct > 0 and check.read_pct > 0]
    if not usable:
        return None
    first = usable[0]
    shared = math.hypot(
        math.sqrt(max(first.read_u_pct**2 - first.noise_u_pct**2, 0.0)), first.check_u_pct
    )
    state = np.zeros(2)
    cov = np.diag([(shared / first.check_pct) ** 2, RATE_SD**2])
    days = 0.0
    for check in usable:
        state, cov = _passed(state, cov, max(check.days - days, 0.0))
        days = max(check.days, days)
        noise = (check.noise_u_pct / check.read_pct) ** 2
        gain = cov[:, 0] / (cov[0, 0] + noise)
        state = state + gain * (math.log(check.read_pct / check.check_pct) - state[0])
        cov = cov - np.outer(gain, cov[0])
    return Drift(
        float(state[0]), math.sqrt(float(cov[0, 0])), float(state[1]), _due_days(state, cov)
    )


def _passed(
    state: Floats,
    cov: Floats,
    days: float,
) -> tuple[
    Floats,
    Floats,
]:
    """State and covariance some days later."""
    step = np.array([[1.0, days], [0.0, 1.0]])
    return step @ state, step @ cov @ step.T + np.diag([WALK_SD**2 * days, 0.0])


def _due_days(
    state: Floats,
    cov: Floats,
) -> float:
    """Whole days until the offset may be too much."""
    for days in range(LONGEST_DAYS):
        then, doubt = _passed(state, cov, float(days))
        if abs(float(then[0])) + math.sqrt(float(doubt[0, 0])) > DUE:
            return float(days)
    return float(LONGEST_DAYS)

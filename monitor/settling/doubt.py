"""Standard doubts of a salinity and of a step: calibration, temperature, the probe's trust."""

from __future__ import annotations

import math

import numpy as np

from monitor.blocks import Floats
from monitor.calibration import Calibration
from monitor.settling.history import Bin, Still

THERMOMETER_U_C = 0.1  # a doubt of no more than this is a thermometer's
NO_THERMOMETER_U_C = 1.0  # of the water's temperature, where nothing measures it


class Doubt:
    """What the calibration says about readings, with and without a thermometer."""

    def __init__(self, calibration: Calibration, temp_u_c: float, temp_c: float | None) -> None:
        """`temp_c`: taken where there is no thermometer; the standards' mean if None."""
        self.calibration = calibration
        self.temp_u_c = temp_u_c
        self.temp_c = calibration.temp_c if temp_c is None else temp_c
        self.unknown_c = temp_u_c if temp_u_c > THERMOMETER_U_C else NO_THERMOMETER_U_C

    def salinity_pct(self, period_us: Floats, temp_c: Floats) -> Floats:
        """Salinities of readings, (n,)."""
        known_c = np.where(np.isnan(temp_c), self.temp_c, temp_c)
        return self.calibration.salinity_pct(period_us, known_c)

    def level_pct(self, reading: Bin, sd_pct: float, widen: float) -> float:
        """Standard doubt of a salinity near the reading, of its own sd; `widen` is relative."""
        return math.hypot(sd_pct, reading[1] * self.common(reading, widen))

    def common(self, reading: Bin, widen: float) -> float:
        """Relative standard doubt that all readings near this one have in common."""
        _, salinity_pct, _, period_us, temp_c = reading
        known_c = self.temp_c if temp_c != temp_c else temp_c
        off_c = self.unknown_c if temp_c != temp_c else 0.0
        u = self.calibration.u_pct(period_us, known_c, self.temp_u_c, off_c)
        return math.hypot(u / salinity_pct, widen) if salinity_pct > 0.0 else widen

    def step_pct(self, still: Still, after: list[Bin]) -> float:
        """Standard doubt of the step from still water to the readings after it."""
        to_us = sum(reading[3] for reading in after) / len(after)
        to_c = sum(reading[4] for reading in after) / len(after)
        from_c = still.temp_c
        if to_c != to_c or from_c != from_c:
            from_c = to_c = self.temp_c
        return self.calibration.u_step_pct(still.period_us, from_c, to_us, to_c, self.temp_u_c)

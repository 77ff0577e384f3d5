"""The water of one virtual tank: what is poured in, and the salinity where the probe hangs."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from drivers.virtual_tank.mixing import GRID_S, Floats, Mixing


@dataclass(frozen=True)
class Pour:
    """A dose that went in, and where the mixed tank ends up (%, no later dose or drift)."""

    at_s: float
    open_s: float
    step_pct: float
    final_pct: float
    response: Floats

    def shown(self, time_s: Floats) -> Floats:
        """Share of the step at the probe, (n,)."""
        place = np.clip((time_s - self.at_s) / GRID_S, -1.0, self.response.size - 1.0)
        left = np.floor(place).astype(np.int64)
        right = np.minimum(left + 1, self.response.size - 1)
        part = place - left
        begun = np.where(left < 0, 0.0, self.response[left])
        return np.asarray(begun * (1 - part) + self.response[right] * part)


class Tank:
    """Salinity at the probe as a function of time; what is poured later changes only later times.

    salinity_pct, volume_ml : at time 0
    mode : "grows" or "overflows", as in the bench file
    water_ml_per_h : water without salt that runs in (above 0) or evaporates (below 0)
    """

    def __init__(
        self,
        salinity_pct: float,
        volume_ml: float,
        mixing: Mixing,
        rng: np.random.Generator,
        mode: Literal["grows", "overflows"] = "grows",
        water_ml_per_h: float = 0.0,
    ) -> None:
        self.start_pct = salinity_pct
        self.start_ml = self.volume_ml = volume_ml
        self.mixing = mixing
        self.mode = mode
        self.water_ml_per_h = water_ml_per_h
        self.pours: list[Pour] = []
        self._rng = rng

    def pour(self, at_s: float, liquid_pct: float, volume_ml: float, open_s: float) -> Pour:
        """Pour `volume_ml` of a liquid from `at_s` on, evenly over `open_s`; doses in order.

        A tank that grows gains the volume; one that overflows keeps its own, well mixed.
        """
        thinned = float(self._thinned(np.asarray(at_s)))
        before = self.settled_pct * thinned
        if self.mode == "grows":
            salt = before * self.volume_ml + liquid_pct * volume_ml
            final = salt / (self.volume_ml + volume_ml)
            self.volume_ml += volume_ml
        else:
            left = math.exp(-volume_ml / self.volume_ml)
            final = liquid_pct + (before - liquid_pct) * left
        response = self.mixing.response(open_s, self._rng)
        poured = Pour(at_s, open_s, (final - before) / thinned, final, response)
        self.pours.append(poured)
        return poured

    def forget(self, before_s: float) -> None:
        """Keep of doses that were mixed by then only where they ended; the past is lost."""
        mixing = [p for p in self.pours if p.at_s + p.response.size * GRID_S >= before_s]
        self.start_pct = self.settled_pct - sum(p.step_pct for p in mixing)
        self.pours = mixing

    @property
    def settled_pct(self) -> float:
        """Where all that was poured ends up, drift left aside."""
        return self.start_pct + sum(p.step_pct for p in self.pours)

    def salinity_pct(self, time_s: Floats) -> Floats:
        """At the probe, (n,) % by mass, without any noise of reading."""
        level = np.full(time_s.shape, self.start_pct)
        for poured in self.pours:
            if time_s.size and time_s[-1] > poured.at_s:
                level += poured.step_pct * poured.shown(time_s)
        return np.maximum(level * self._thinned(time_s), 0.0)

    def _thinned(self, time_s: Floats) -> Floats:
        return self.start_ml / (self.start_ml + self.water_ml_per_h * time_s / 3600.0)

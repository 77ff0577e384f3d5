"""A change that nobody recorded: from when the filtered value left the level until it slows."""

from __future__ import annotations

import math

from monitor.settling.history import History

ONSET_S = 5.0  # it is followed no sooner after its onset
ONSET_MOST_S = 300.0  # before it was seen


class Disturbance:
    """One that was seen and is not followed yet."""

    def __init__(self, t: float, history: History, level_pct: float, band_pct: float) -> None:
        """Seen at t: its onset is when the filtered value was last within a band of the level."""
        self.band = band_pct
        self.onset_t = t - 1.0
        self._fastest = 0.0  # change in ONSET_S, %
        for k, _, filtered, _, _ in reversed(history.bins):
            if abs(filtered - level_pct) <= band_pct or t - k > ONSET_MOST_S:
                break
            self.onset_t = float(k)

    def slows(self, t: float, history: History, shown_pct: float) -> bool:
        """Whether it can be followed: it moves at less than half of its speed, or hardly."""
        if t - self.onset_t <= ONSET_S:
            return False
        past = history.filtered_at(t - ONSET_S)
        change = abs(shown_pct - past) if past == past else math.inf
        self._fastest = max(self._fastest, change)
        return change < max(0.5 * self._fastest, self.band)

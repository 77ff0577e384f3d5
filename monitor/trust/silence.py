"""`no-pulses` and `short`: nothing comes, or the period lies at the circuit's own floor."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from monitor import bench
from monitor.blocks import Second
from monitor.trust.intake import floor_us

SILENT_S, SILENT_INTERVALS = 4.0, 10.0
SHORT_S, SHORT_N = 4.0, 6
SHORT_SHARE = 0.12  # of the way from the floor to the period at the saltiest standard


class Silence:
    """When the last pulse came; whether the link is up."""

    def __init__(self, carried: Mapping[str, Any] | None) -> None:
        self.linked = True
        self.newest: Second | None = None  # with a pulse in it
        self._since: float | None = None  # silence is counted from here, if no pulse came later
        self._carried_t: float | None = (carried or {}).get("last_pulse_t")

    def carry(self) -> dict[str, Any]:
        """The time of the last pulse."""
        last = self._carried_t if self.newest is None else _last_pulse(self.newest)
        return {"last_pulse_t": last}

    def link(self, up: bool, t: float) -> None:
        """The port came or went: silence between is the link's."""
        self.linked = up
        self.restart(t)

    def restart(self, t: float) -> None:
        """Count silence anew."""
        self._since = t

    def step(self, second: Second, rate_hz: float) -> float | None:
        """Since when there has been no pulse, once that is too long; None while all is well."""
        if second.n_rows > second.zeros:
            self.newest = second
            return None
        if not self.linked:
            return None
        since = float(second.k) if self._since is None else self._since
        if self.newest is not None:
            since = max(since if self._since is not None else -1e12, _last_pulse(self.newest))
        self._since = since
        wait_s = max(SILENT_S, SILENT_INTERVALS / rate_hz) if rate_hz > 0 else SILENT_S
        if second.zeros:
            wait_s = SILENT_S
        return since if second.t - since >= wait_s else None


def _last_pulse(second: Second) -> float:
    if not second.zeros:
        return float(second.time_s[-1])
    return float(second.time_s[second.period_us > 0][-1])


class Short:
    """Periods at the floor: the electrodes or their leads touch."""

    def __init__(self, standards: Sequence[bench.Standard]) -> None:
        top = min((s.period_us for s in standards if s.salinity_pct > 0), default=0.0)
        floor = floor_us(standards) or 0.05 * top
        self.below_us = floor + SHORT_SHARE * (top - floor)
        self._from_t: float | None = None
        self._n = 0

    def step(self, second: Second) -> tuple[float | None, float | None]:
        """Since when the period lies at the floor (None: it does not), and when it left it."""
        if not second.low_us < self.below_us:
            ended = None
            if self._from_t is not None and second.n_rows > second.zeros:
                ended = float(second.time_s[second.period_us > 0][0])
                self._from_t, self._n = None, 0
            return None, ended
        ended = None
        for t, period in zip(second.time_s.tolist(), second.period_us.tolist()):
            if 0 < period < self.below_us:
                self._from_t = t if self._from_t is None else self._from_t
                self._n += 1
            elif period > 0 and self._from_t is not None:
                ended, self._from_t, self._n = t, None, 0
        since = self._from_t
        if since is not None and self._n >= SHORT_N and second.t - since >= SHORT_S:
            return since, ended
        return None, ended

"""`no-pulses` and `short`: nothing comes, or the period lies at the circuit's own floor."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from monitor import bench
from monitor.blocks import Second
from monitor.findings import Finding
from monitor.trust.force import InForce
from monitor.trust.intake import floor_us

SILENT_S, SILENT_INTERVALS = 4.0, 10.0
SHORT_S, SHORT_N = 4.0, 6  # a loose lead's dip lasts 4 s less than once in 10,000
SHORT_SHARE = 0.12  # of the way from the floor to the period at the saltiest standard


class Silence:
    """When the last pulse came; whether the link is up."""

    def __init__(self, carried: Mapping[str, Any] | None) -> None:
        self.linked = True
        self._turned_t = 0.0  # when the link last came or went
        self.newest: Second | None = None  # with a pulse in it
        self._since: float | None = None  # silence is counted from here, if no pulse came later
        self._carried_t: float | None = (carried or {}).get("last_pulse_t")

    def carry(self) -> dict[str, Any]:
        """The time of the last pulse."""
        last = self._carried_t if self.newest is None else last_pulse_t(self.newest)
        return {"last_pulse_t": last}

    def link(self, up: bool, t: float) -> None:
        """The port came or went: silence between is the link's."""
        self.linked = up
        self._turned_t = t
        self.restart(t)

    def restart(self, t: float) -> None:
        """Count silence anew."""
        self._since = t

    def judge(self, second: Second, rate_hz: float, force: InForce) -> list[Finding]:
        """`no-pulses` begun or ended in this second."""
        if second.n_rows > second.zeros:
            self.newest = second
            if second.t > self._turned_t:  # else these pulses came before the link was lost
                self.linked = True
            if "no-pulses" in force:
                return [force.end("no-pulses", second.t, first_pulse_t(second))]
            return []
        if not self.linked or "no-pulses" in force:
            return []
        if self._since is None:
            self._since = float(second.k)
            if self.newest is not None:
                self._since = last_pulse_t(self.newest)
        elif self.newest is not None:
            self._since = max(self._since, last_pulse_t(self.newest))
        wait_s = max(SILENT_S, SILENT_INTERVALS / rate_hz) if rate_hz > 0 else SILENT_S
        if second.zeros:
            wait_s = SILENT_S
        if second.t - self._since < wait_s:
            return []
        what = "only zeros" if second.zeros else "not a line"
        text = f"{what} for {second.t - self._since:.0f} s"
        return [force.begin("no-pulses", second.t, self._since, text)]


class Short:
    """Periods at the floor: the electrodes or their leads touch."""

    def __init__(self, standards: Sequence[bench.Standard]) -> None:
        top = min((s.period_us for s in standards if s.salinity_pct > 0), default=0.0)
        floor = floor_us(standards) or 0.05 * top
        self.below_us = floor + SHORT_SHARE * (top - floor)
        self._from_t: float | None = None
        self._n = 0

    @property
    def suspects(self) -> bool:
        """Whether the newest periods lie at the floor."""
        return self._from_t is not None

    def judge(self, second: Second, force: InForce) -> list[Finding]:
        """`short` begun or ended in this second."""
        if not second.low_us < self.below_us and self._from_t is None and "short" not in force:
            return []
        found: list[Finding] = []
        for t, period in zip(second.time_s.tolist(), second.period_us.tolist()):
            if 0 < period < self.below_us:
                self._from_t = t if self._from_t is None else self._from_t
                self._n += 1
            elif period > 0:
                self._from_t, self._n = None, 0
                if "short" in force:
                    found.append(force.end("short", second.t, t))
        since = self._from_t
        if since is None or self._n < SHORT_N or second.t - since < SHORT_S or "short" in force:
            return found
        text = f"{self._n} periods below {self.below_us:.4g} us, the last {second.low_us:.4g} us"
        return [*found, force.begin("short", second.t, since, f"{text}: the circuit's own")]


def first_pulse_t(second: Second) -> float:
    """Time of the first pulse in a second that has one."""
    return float(second.time_s[second.period_us > 0][0])


def last_pulse_t(second: Second) -> float:
    """Time of the last pulse in a second that has one."""
    return float(second.time_s[second.period_us > 0][-1])

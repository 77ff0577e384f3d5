"""The level that is believed: where a probe's ln period stands, how it scatters, what is a stray.

Rules:
- Locked: the level m follows the readings inside the gate. The gate is 5 times the noise of one
  reading, between 1.2 and 5 %: noise alone leaves it less than once in a million readings.
- Mixing: after a dose, or 8 s without a reading in the gate, m is the 40th percentile of the seven
  seconds about the second that is judged (three seconds late: centring cancels slopes).
- Locked again once the dose is over and the last twelve medians lie on a line that hardly moves.
- All in ln us, so that a share of the reading is a difference.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np

from monitor import bench
from monitor.blocks import NAN, Floats, Second
from monitor.dosing.ledger import Change, Dose

GATE_SDS, GATE = 5.0, (0.012, 0.05)
INNER = 0.6  # of the gate: readings beyond it are on their way to a jump, or back
FOLLOW, FOLLOW_MOST = 0.2, 0.004  # a second; of its residual, which is clipped
LEARN, LEARNED = 0.004, 250  # a reading, of the noise; from so many on
UNKNOWN_NOISE = 0.002
LEAST_TICKS = 0.3  # less noise than that cannot be seen beside the tick
LOST_S, LOST_NOISY_S = 8, 20  # without a reading in the gate; while jumps go on
LINE_N = 12
BACK_S = 30.0
SETTLE_S = 8.0  # after a dose has run in before the level may lock
MIX_S, MIX_LATE_S = 7, 3
MIX_GATE, MIX_SDS, MIX_SCALES = 0.03, 6.0, 9
AFTER_DOSE_S = 300.0
RATE_GAP_S = 60


class Judged(NamedTuple):
    """Readings of one second against the level that held for it."""

    k: int
    time_s: Floats
    ln_us: Floats  # pulses only
    m: float
    gate: float
    drifting: bool  # the level itself leaves the gate: excursions tell nothing


class Level:
    """One probe's level and noise, second by second."""

    def __init__(self, settings: bench.Probe, carried: Mapping[str, Any] | None) -> None:
        carried = carried or {}
        self.tick_us = settings.tick_us
        self.locked = False
        self.m = NAN if carried.get("m") is None else carried["m"]
        self.in_gate_ln = NAN  # mean of this second's readings in the gate
        self.told_noise = noise_of(settings.standards_in_force)  # None: they do not tell
        noise = carried.get("noise") or self.told_noise
        self.noise = noise or UNKNOWN_NOISE
        self.learned = LEARNED if noise else 0  # readings
        self.rate_hz = carried.get("rate_hz") or settings.rate_hz or 0.0
        self._rated_k = -1
        self.gate = GATE[1]
        self.medians: deque[tuple[int, float]] = deque(maxlen=64)
        self.locked_k = -1  # the second in which it locked last
        self.dosed_until_t = -math.inf
        self.step_ln = 0.0  # largest |ln| step that the newest dose can make
        self._lost = 0
        self._recent: deque[tuple[int, Floats, Floats]] = deque(maxlen=MIX_S)
        self._scales: deque[float] = deque(maxlen=MIX_SCALES)
        # calm seconds with readings beyond the inner gate; their level and inner gate
        self.edgy: deque[tuple[Second, float, float]] = deque(maxlen=64)

    @property
    def sb(self) -> float:
        """Standard deviation of a one-second median."""
        return 1.25 * self.noise / math.sqrt(max(self.rate_hz, 1.0))

    def after_dose(self, t: float) -> bool:
        """Whether a dose ended less than five minutes before."""
        return t < self.dosed_until_t + AFTER_DOSE_S

    def carry(self) -> dict[str, Any]:
        """The baseline, and the level that was believed."""
        known = self.m == self.m
        return {"m": self.m if known else None, "noise": self.noise, "rate_hz": self.rate_hz}

    def meet(self, changes: Sequence[Change], t: float) -> None:
        """Doses and water unlock the level."""
        for change in changes:
            if isinstance(change, Dose):
                self.dosed_until_t = max(self.dosed_until_t, change.end_s)
                share = change.volume_ml / change.tank_ml if change.tank_ml > 0 else 0.1
                self.step_ln = math.log1p(share)
            else:
                self.dosed_until_t = max(self.dosed_until_t, t)
                self.step_ln = 0.1
            self.unlock()

    def stirred(self, t: float) -> None:
        """The probe was put back: for half a minute the water counts as mixing."""
        self.dosed_until_t = max(self.dosed_until_t, t + BACK_S - SETTLE_S)
        self.unlock()

    def unlock(self) -> None:
        """Believe no level until the readings stand still again."""
        self.locked = False
        self._lost = 0
        self._recent.clear()
        self._scales.clear()

    def forget(self) -> None:
        """What was read before tells nothing of what comes (out and back, a gap)."""
        self.unlock()
        self.medians.clear()
        self.edgy.clear()

    def calm(self, second: Second) -> bool:
        """Take a second whose readings all lie inside the gate; False if it is not one."""
        if not self.locked or not second.n or second.zeros:
            return False
        m, gate, high_us, low_us = self.m, self.gate, second.high_us, second.low_us
        mean = math.log(second.mean_us)
        off = mean - m
        if not -0.3 * gate <= off <= 0.3 * gate:
            return False
        level_us = math.exp(m)
        most = math.exp(gate)
        if high_us > level_us * most or low_us * most < level_us:
            return False
        inner = math.exp(INNER * gate)
        if high_us > level_us * inner or low_us * inner < level_us:
            self.edgy.append((second, m, INNER * gate))
        self.in_gate_ln = mean
        self._lost = 0
        self.m = m + FOLLOW * min(max(off, -FOLLOW_MOST), FOLLOW_MOST)
        self.medians.append((second.k, math.log(second.median_us)))
        self._rate(second)
        return True

    def learn(self, second: Second) -> None:
        """Follow the noise of one reading; only while all is well."""
        n = second.n
        share = min(LEARN * n, 0.5)
        if self.learned < LEARNED:  # as a mean of all so far
            self.learned += n
            share = max(share, n / self.learned)
        seen = 0.886 * min(second.jitter, 4.0 * self.noise)
        noise = self.noise + share * (seen - self.noise)
        self.noise = noise = max(noise, LEAST_TICKS * self.tick_us / second.mean_us)
        self.gate = min(max(GATE_SDS * noise, GATE[0]), GATE[1])

    def look(self, second: Second, noisy: bool) -> list[Judged]:
        """Take any other second; the seconds that can be judged now, with their level."""
        self.in_gate_ln = NAN
        period = second.period_us
        pulse = period > 0
        if not pulse.any():
            self._miss(second, noisy)
            return []
        ln_us = np.log(period[pulse])
        time_s = second.time_s[pulse]
        self.medians.append((second.k, math.log(second.median_us)))
        self._rate(second)
        if self.locked:
            return self._locked_second(second, time_s, ln_us, noisy)
        return self._mixing_second(second, time_s, ln_us)

    def _locked_second(
        self, second: Second, time_s: Floats, ln_us: Floats, noisy: bool
    ) -> list[Judged]:
        inside = np.abs(ln_us - self.m) <= self.gate
        m, drifting = self.m, False
        if inside.any():
            self.in_gate_ln = float(ln_us[inside].mean())
            off = self.in_gate_ln - m
            drifting = abs(off) > 0.3 * self.gate
            self.m = m + FOLLOW * min(max(off, -FOLLOW_MOST), FOLLOW_MOST)
            self._lost = 0
        else:
            self._miss(second, noisy)
        if self.locked and drifting and self._sat_wrong():
            self.unlock()
        return [Judged(second.k, time_s, ln_us, m, self.gate, drifting)]

    def _miss(self, second: Second, noisy: bool) -> None:
        self._lost += 1
        if self.locked and self._lost >= (LOST_NOISY_S if noisy else LOST_S):
            self.unlock()

    def _sat_wrong(self) -> bool:
        """The median of 25 medians is beyond 0.8 of the gate: the level is another."""
        if len(self.medians) < 25:
            return False
        recent = sorted(ln for _, ln in list(self.medians)[-25:])
        return abs(recent[12] - self.m) > 0.8 * self.gate

    def _mixing_second(self, second: Second, time_s: Floats, ln_us: Floats) -> list[Judged]:
        recent = self._recent
        if recent and second.k - recent[-1][0] > 2:
            recent.clear()
        recent.append((second.k, time_s, ln_us))
        self._lock(second)
        if len(recent) <= MIX_LATE_S:
            return []
        ordered = np.sort(np.concatenate([ln for _, _, ln in recent]))
        q40, q10 = (float(ordered[int(share * len(ordered))]) for share in (0.4, 0.1))
        self._scales.append((q40 - q10) / 1.03)
        usual = sorted(self._scales)[len(self._scales) // 2]
        gate = max(GATE_SDS * self.noise, MIX_SDS * usual, MIX_GATE)
        k, centre_s, centre_ln = recent[-1 - MIX_LATE_S]
        if not self.locked:
            inside = np.abs(ln_us - q40) <= gate
            self.in_gate_ln = float(ln_us[inside].mean()) if inside.any() else NAN
        return [Judged(k, centre_s, centre_ln, q40, gate, False)]

    def _lock(self, second: Second) -> None:
        """Believe the level again once the medians stand still."""
        if second.t < self.dosed_until_t + SETTLE_S or len(self.medians) < LINE_N:
            return
        last = list(self.medians)[-LINE_N:]
        if last[-1][0] - last[0][0] > 2 * LINE_N / min(self.rate_hz, 1.0):
            return
        end, moves, spread = line([ln for _, ln in last])
        if spread < 2.2 * self.sb + 0.0005 and abs(moves) < max(0.004, 5.0 * self.sb):
            self.locked = True
            self.locked_k = second.k
            self.m = end
            self._lost = 0

    def _rate(self, second: Second) -> None:
        """Rows a second; a gap of a minute tells nothing of it."""
        apart_s = second.k - self._rated_k
        self._rated_k = second.k
        if apart_s < RATE_GAP_S:
            share = 0.05 if self.rate_hz else 1.0
            self.rate_hz += share * (second.n_rows / apart_s - self.rate_hz)


def line(values: Sequence[float]) -> tuple[float, float, float]:
    """Straight line through equally spaced values: its end, how far it moves, and the 80th
    percentile of the distances from it."""
    n = len(values)
    middle = 0.5 * (n - 1)
    mean = sum(values) / n
    slope = sum((i - middle) * v for i, v in enumerate(values)) / (n * (n * n - 1) / 12.0)
    off = sorted(abs(v - mean - slope * (i - middle)) for i, v in enumerate(values))
    return mean + slope * middle, slope * (n - 1), off[int(0.8 * n)]


def noise_of(standards: Sequence[bench.Standard]) -> float | None:
    """Noise of one reading, relative, pooled over the standards' own scatter.

    The tick's part is left in, so noise below a third of a tick comes out too great. Taking it out
    missed 14 of 180 drawn stuck figures where 4 are missed now.
    """
    total = weight = 0.0
    for each in standards:
        if each.sd_us is not None and each.readings > 2:
            total += (each.readings - 1) * (each.sd_us / each.period_us) ** 2
            weight += each.readings - 1
    return max(math.sqrt(total / weight), 1e-4) if weight else None

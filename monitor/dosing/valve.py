"""A dosing valve's flow from timed runs into a cylinder: a straight line with its doubt.

collected mL = flow x open s + offset: the offset is what passes, or is missing, at opening and
closing besides the steady flow. Ordinary least squares; the doubt is the runs' own scatter about
the line, with Student's t of its degrees of freedom (JCGM 100:2008, H.3, does the same).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from monitor.calibration.student import f_tail, t_quantile

Runs = Sequence[tuple[float, float]]

TWO_RUNS_U = 0.02  # of the volume: the scatter assumed where runs are too few to show any
READ_U = 0.001  # of the volume: no cylinder is read better, though runs lie on a line exactly
EXACT = 1e-6  # of the volume: scatter below it is none
OPENING_S = 0.1  # of flow pass or are missing at opening and closing, where no run tells
SHORT_S = 1.0
OUTLIER_P = 0.01
AIR = 0.1  # of the first run missing, against the line of the others: air before it


class FlowError(ValueError):
    """The runs allow no flow; `str()` is the one line to show."""


@dataclass(frozen=True)
class Flow:
    """Volume = ml_per_s x open_s + offset_ml; standard uncertainties and their covariance."""

    ml_per_s: float
    u_ml_per_s: float
    offset_ml: float
    u_offset_ml: float
    cov: float
    sd_ml: float  # of one run about the line
    dof: float
    runs: int
    lack_of_fit_p: float | None  # None without repeated open times
    remarks: tuple[str, ...]

    @property
    def k(self) -> float:
        """Coverage factor for 95 %."""
        return t_quantile(0.975, self.dof)

    def volume(self, open_s: float, times: int = 1) -> tuple[float, float]:
        """mL that pass in so many seconds in so many openings, and their standard uncertainty."""
        variance = (
            (open_s * self.u_ml_per_s) ** 2
            + (times * self.u_offset_ml) ** 2
            + 2.0 * open_s * times * self.cov
            + times * self.sd_ml**2
        )
        volume = self.ml_per_s * open_s + times * self.offset_ml
        return max(volume, 0.0), math.sqrt(max(variance, 0.0))

    def dose(self, open_s: float) -> tuple[float, float]:
        """mL of a dose of so many seconds, and half of its u95.

        Few runs tell their own scatter badly: half of the expanded uncertainty is what a
        coverage factor of 2 makes right again (JCGM 100:2008, G.3).
        """
        volume, u = self.volume(open_s)
        return volume, u * max(self.k, 2.0) / 2.0

    def open_s(self, volume_ml: float) -> float:
        """Seconds to open for this volume. Infinite where the valve cannot give it."""
        if self.ml_per_s <= 0 or volume_ml <= self.offset_ml:
            return math.inf
        return (volume_ml - self.offset_ml) / self.ml_per_s

    def u_open_s(self, volume_ml: float) -> float:
        """Standard uncertainty of `open_s`."""
        open_s = self.open_s(volume_ml)
        return self.volume(open_s)[1] / self.ml_per_s if math.isfinite(open_s) else math.inf


def flow(runs: Runs) -> Flow:
    """The valve's flow from (open s, collected mL) runs.

    Raises FlowError if there is no run, or nothing came.
    """
    if not runs:
        raise FlowError("no timed runs; expected runs = [[open s, collected mL], ...]")
    if not any(ml > 0 for _, ml in runs):
        raise FlowError("every run collected nothing; expected mL in a cylinder")
    times = [t for t, _ in runs]
    if len(set(times)) < 2:
        return _through_zero(runs)
    slope, offset, residuals = _line(runs)
    n, dof = len(runs), len(runs) - 2
    mean_t = sum(times) / n
    sxx = sum((t - mean_t) ** 2 for t in times)
    most = max(ml for _, ml in runs)
    if dof > 0:
        sd = math.sqrt(sum(r * r for r in residuals) / dof)
        sd = sd if sd > EXACT * most else READ_U * most
    else:
        sd, dof = TWO_RUNS_U * most, 2
    u_slope = sd / math.sqrt(sxx)
    u_offset = sd * math.sqrt(1.0 / n + mean_t**2 / sxx)
    cov = -mean_t * sd**2 / sxx
    return Flow(
        slope, u_slope, offset, u_offset, cov, sd, dof, n, _lack_of_fit(runs), _remarks(runs)
    )


def _line(runs: Runs) -> tuple[float, float, list[float]]:
    n = len(runs)
    mean_t = sum(t for t, _ in runs) / n
    mean_ml = sum(ml for _, ml in runs) / n
    sxx = sum((t - mean_t) ** 2 for t, _ in runs)
    slope = sum((t - mean_t) * (ml - mean_ml) for t, ml in runs) / sxx
    offset = mean_ml - slope * mean_t
    return slope, offset, [ml - slope * t - offset for t, ml in runs]


def _through_zero(runs: Runs) -> Flow:
    """One open time only: the offset cannot be told from the flow.

    It is taken as none, within what flows in OPENING_S; at the runs' own length that cancels.
    """
    n, open_s = len(runs), runs[0][0]
    mean = sum(ml for _, ml in runs) / n
    sd = TWO_RUNS_U * mean
    if n > 1:
        scatter = math.sqrt(sum((ml - mean) ** 2 for _, ml in runs) / (n - 1))
        sd = scatter if scatter > EXACT * mean else READ_U * mean
    u_offset = OPENING_S * mean / open_s
    u_slope = math.hypot(sd / math.sqrt(n), u_offset) / open_s
    said = ("all runs of one length: what passes at opening and closing is taken as none",)
    cov = -(u_offset**2) / open_s
    dof = max(n - 1, 2)
    return Flow(mean / open_s, u_slope, 0.0, u_offset, cov, sd, dof, n, None, said + _short(runs))


def _lack_of_fit(runs: Runs) -> float | None:
    """p that the means of repeated times scatter about the line as repeats do about their mean."""
    groups: dict[float, list[float]] = {}
    for t, ml in runs:
        groups.setdefault(t, []).append(ml)
    pure_dof = len(runs) - len(groups)
    lack_dof = len(groups) - 2
    if pure_dof < 1 or lack_dof < 1:
        return None
    pure = sum((ml - sum(g) / len(g)) ** 2 for g in groups.values() for ml in g)
    slope, offset, _ = _line(runs)
    lack = sum(len(g) * (sum(g) / len(g) - slope * t - offset) ** 2 for t, g in groups.items())
    if pure <= 0:
        return 0.0 if lack > 1e-12 else 1.0
    return f_tail((lack / lack_dof) / (pure / pure_dof), lack_dof, pure_dof)


def _remarks(runs: Runs) -> tuple[str, ...]:
    said = list(_short(runs))
    lack = _lack_of_fit(runs)
    if lack is not None and lack < OUTLIER_P:
        said.append(f"the line does not fit (p = {lack:.2g}): the flow changes with open time")
    if len(runs) < 3:
        said.append("two runs draw a line through anything: the doubt is a guess; time more runs")
        return tuple(said)
    for i, run in enumerate(runs):
        excess, odd = _against_others(run, [*runs[:i], *runs[i + 1 :]], len(runs))
        where = f"run {i + 1} ({run[0]:g} s, {run[1]:g} mL)"
        if i == 0 and excess < -AIR * run[1]:
            said.append(f"{where} gave {-excess:.2g} mL too little: air in the line before it?")
        elif odd:
            said.append(f"{where} is {excess:+.2g} mL off the others' line: time it again")
    return tuple(said)


def _short(runs: Runs) -> tuple[str, ...]:
    short = [t for t, _ in runs if t < SHORT_S]
    if not short:
        return ()
    return (f"{len(short)} runs shorter than {SHORT_S:g} s: opening and closing rule them",)


def _against_others(run: tuple[float, float], others: Runs, n: int) -> tuple[float, bool]:
    """mL by which a run is off the others' line, and whether chance hardly does that to n runs."""
    if len({t for t, _ in others}) < 2:
        return 0.0, False
    slope, offset, residuals = _line(others)
    excess = run[1] - slope * run[0] - offset
    dof = len(others) - 2
    if dof < 1:
        return excess, False
    sd = math.sqrt(sum(r * r for r in residuals) / dof)
    mean_t = sum(t for t, _ in others) / len(others)
    sxx = sum((t - mean_t) ** 2 for t, _ in others)
    spread = sd * math.sqrt(1.0 + 1.0 / len(others) + (run[0] - mean_t) ** 2 / sxx)
    least = READ_U * max(ml for _, ml in others)
    return excess, abs(excess) > t_quantile(1.0 - OUTLIER_P / (2 * n), dof) * max(spread, least)

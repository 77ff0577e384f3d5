"""What a change begins from: still water, water that was still moving, or nobody knows."""

from __future__ import annotations

import math
from collections.abc import Iterable

from monitor.blocks import NAN
from monitor.dosing.ledger import Dose
from monitor.settling.history import FLICKER, History, Still
from monitor.settling.mixing import SHORTEST_S, Change, Mixing

ONSET_SLACK_S = 10.0  # a disturbance that began so shortly before a dose is that dose


def dosed(
    dose: Dose,
    history: History,
    mixing: Mixing | None,
    answered: Iterable[tuple[Mixing, float]],
    common: float,
) -> Change:
    """The change that a recorded dose began.

    Parameters
    ----------
    dose : as recorded, now or late
    history : the readings so far
    mixing : the change under way, if any
    answered : changes that came to rest, oldest first, and when that was said
    common : relative standard doubt that all readings have in common
    """
    open_s = max(dose.open_s, SHORTEST_S)
    filtered = history.filtered_at(dose.time_s)
    overtaken = _under_way(dose.time_s, mixing, answered)
    if overtaken is not None:
        still = _foreseen(overtaken, filtered)
        extra = abs(filtered - still.level_pct) if filtered == filtered else 0.0
        return Change(dose.time_s, open_s, still, dose, extra_pct=extra, common=common)
    quiet = history.still(dose.time_s)
    if quiet is not None:
        return Change(dose.time_s, open_s, quiet, dose, common=common)
    return _into_unknown(dose, open_s, history, filtered)


def unrecorded(
    from_t: float, open_s: float, level_pct: float, filtered_pct: float, history: History
) -> Change:
    """A change that nobody recorded, from a still level."""
    still = history.still(from_t) or _at(level_pct, history)
    if level_pct == level_pct:
        still = Still(level_pct, still.noise_pct, still.u_pct, still.period_us, still.temp_c)
    size = abs(filtered_pct - still.level_pct)
    return Change(from_t, open_s, still, None, ledger=False, size_pct=size)


def struck(was: Change, step_pct: float) -> Change:
    """The same change, its dose struck out."""
    return Change(was.from_t, was.open_s, was.still, None, False, was.extra_pct, abs(step_pct))


def unforetold(mixing: Mixing, t: float, filtered_pct: float) -> Change:
    """The change under way from t on, where nothing tells any more where it will land."""
    was = mixing.change
    level = filtered_pct if filtered_pct == filtered_pct else was.still.level_pct
    size = max(abs(mixing.step_pct), abs(level - was.still.level_pct))
    old = was.still
    still = Still(level, old.noise_pct, old.u_pct, old.period_us, old.temp_c)
    from_t = max(t, was.from_t + was.open_s) - SHORTEST_S
    return Change(from_t, SHORTEST_S, still, was.dose, False, size, size)


def _under_way(
    at_t: float, mixing: Mixing | None, answered: Iterable[tuple[Mixing, float]]
) -> Mixing | None:
    """The change that was not at rest yet at that time, by what was known then."""
    if mixing is not None:
        slack = 0.0 if mixing.change.dose is not None else ONSET_SLACK_S
        if mixing.change.from_t + slack <= at_t:
            return mixing
    for earlier, said_t in reversed(list(answered)):
        if earlier.change.dose is not None and earlier.change.from_t <= at_t < said_t:
            return earlier
    return None


def _foreseen(mixing: Mixing, filtered_pct: float) -> Still:
    """Where the change overtaken would have landed, as the water before the next."""
    level, u = mixing.foreseen()
    still = mixing.change.still
    if not (math.isfinite(level) and math.isfinite(u)):
        level, u = filtered_pct, mixing.scale
    return Still(level, still.noise_pct, u, still.period_us, still.temp_c)


def _into_unknown(dose: Dose, open_s: float, history: History, filtered_pct: float) -> Change:
    """A dose into water that was not seen standing still: no ledger, wide priors."""
    level = filtered_pct
    if level != level:
        level = history.bins[0][1] if history.bins else NAN
    still = _at(level, history)
    landing = dose.landing(level, still.u_pct)[0] if level == level else NAN
    size = abs(landing - level) if landing == landing else 0.0
    return Change(dose.time_s, open_s, still, dose, ledger=False, extra_pct=size, size_pct=size)


def _at(level_pct: float, history: History) -> Still:
    _, newest, _, period_us, temp_c = history.bins[-1] if history.bins else (0, NAN, NAN, NAN, NAN)
    level = level_pct if level_pct == level_pct else newest
    return Still(level, history.noise([], level), FLICKER * level, period_us, temp_c)

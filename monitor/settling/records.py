"""The findings of this room, put together: `rest` and `outlook`."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from monitor.findings import Finding
from monitor.settling import outlook
from monitor.settling.doubt import Doubt
from monitor.settling.history import History
from monitor.settling.mixing import Mixing
from monitor.settling.rest import plateau, rested_x
from monitor.settling.verdict import Outcome, likely_reasons
from monitor.trust.judge import Trust

AFTER_S = 10.0  # the last readings that stand for the water at rest
K95 = 2.0  # coverage factor of a u95


class Records:
    """What is said of one probe in its tank."""

    def __init__(self, probe: str, tank: str, doubt: Doubt, liquids: Mapping[str, float]) -> None:
        self.names = {"probe": probe, "tank": tank}
        self.doubt = doubt
        self.liquids = liquids

    def rest(self, mixing: Mixing, t: float, history: History, trust: Trust) -> Finding:
        """The change has come to rest, said at t."""
        judgement = mixing.judgement
        assert judgement is not None
        change = mixing.change
        step, sd = plateau(judgement.free, mixing.band)
        salinity = mixing.level_pct + step
        rested_t = min(mixing.start_t + rested_x(judgement, mixing.band), t)
        return {
            "finding": "rest",
            **self.names,
            "t": t,
            "to_t": None,
            "dose_t": change.dose.time_s if change.dose is not None else None,
            "rested_t": max(rested_t, change.from_t),
            "salinity_pct": salinity,
            "u95_pct": K95 * self.doubt.level_pct(history.bins[-1], sd, trust.widen),
            **self._verdict(mixing, salinity, sd, history),
            **_marked(trust),
        }

    def outlook(self, mixing: Mixing, t: float, history: History, trust: Trust) -> Finding | None:
        """Where the change will land and when, said at t; None while there is nothing to say."""
        landing, sd = mixing.landing()
        if not (math.isfinite(landing) and history.bins):
            return None
        change = mixing.change
        if mixing.judgement is not None:
            rest_in_s, u95_s = outlook.rest_in(mixing.judgement, mixing.band)
            rest_in_s = max(rest_in_s - (t - 1.0 - history.bins[-1][0]), 0.0)
        else:
            to_run_s = max(change.from_t + change.open_s - t, 0.0)
            rest_in_s, u95_s = outlook.rest_in_before(to_run_s, mixing.step_pct, mixing.band)
        return {
            "finding": "outlook",
            **self.names,
            "t": t,
            "dose_t": change.dose.time_s if change.dose is not None else None,
            "salinity_pct": landing,
            "u95_pct": K95 * self.doubt.level_pct(history.bins[-1], sd, trust.widen),
            "rest_in_s": rest_in_s,
            "rest_in_u95_s": u95_s,
            **_marked(trust),
        }

    def _verdict(
        self, mixing: Mixing, salinity: float, sd: float, history: History
    ) -> dict[str, Any]:
        change = mixing.change
        if change.dose is None or mixing.predicted is None:
            return {"predicted_pct": None, "predicted_u95_pct": None, "verdict": "no-prediction"}
        landing, u = mixing.predicted
        after = history.since(history.bins[-1][0] + 1.0 - AFTER_S)
        u_step = self.doubt.step_pct(change.still, after)
        u_all = math.sqrt(sd**2 + u**2 + u_step**2)
        still = change.still
        outcome = Outcome(change.dose, still.level_pct, still.u_pct, salinity, landing, u_all)
        said: dict[str, Any] = {
            "predicted_pct": landing,
            "predicted_u95_pct": K95 * u,
            "verdict": "agrees" if outcome.agrees else "disagrees",
            "before_pct": still.level_pct,
            "step_u95_pct": K95 * math.hypot(sd, u_step),
        }
        if not outcome.agrees:
            said["why"] = likely_reasons(outcome, self.liquids)
        return said


def _marked(trust: Trust) -> dict[str, bool]:
    return {"doubtful": True} if trust.belief == "doubtful" else {}

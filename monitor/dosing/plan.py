"""The next dose: which liquid, how much, how long to open, where it lands and how surely.

Rules:
- Of the liquids that lead to the aim the one that takes the least is chosen, if that can be
  measured out at all (LEAST_S of a valve, LEAST_ML by hand).
- A dose is as well known as its valve's runs; without a valve, to 1 % (common practice, no source).
- Where one dose would change the tank by more than it may change in a quarter of an hour, it is
  given in equal steps, so far apart that the whole takes as long as `fastest_pct_per_h` asks for.
- Refused is what no liquid at hand can do, and what more than doubles the tank.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from monitor.bench import Bench, Tank
from monitor.calibration.student import t_quantile
from monitor.dosing.balance import Known, landing, volume_for, volume_rule_off
from monitor.dosing.ledger import DOSE_U
from monitor.dosing.parts import Part, PlanError, steps_of, stops, volumes, wait_s
from monitor.dosing.valve import Flow, FlowError, flow

LEAST_S, LEAST_ML = 1.0, 1.0  # what can be measured out
MOST_TANKS = {"grows": 1.0, "overflows": 5.0}  # of its volume that a tank is given
K95 = 2.0


@dataclass(frozen=True)
class Plan:
    """A dose to be given. Salinities %, volumes mL."""

    tank: str
    tank_ml: float  # before
    before_pct: float
    before_u95_pct: float
    liquid: str
    volume_ml: float
    volume_u95_ml: float
    valve: str | None
    open_s: float | None  # of all parts together; None without a valve
    predicted_pct: float
    predicted_u95_pct: float
    volume_rule_off_pct: float  # what taking volumes for masses would be off
    parts: tuple[Part, ...]
    others: Mapping[str, float]  # other liquids that would do it, and how much of each

    @property
    def change_pct(self) -> float:
        """What it does to the tank."""
        return self.predicted_pct - self.before_pct

    @property
    def lasts_s(self) -> float:
        """From the first part to the last."""
        return sum(part.wait_s for part in self.parts)


@dataclass(frozen=True)
class _Valve:
    name: str
    flow: Flow


def plan(
    bench: Bench,
    tank: str,
    tank_ml: float | None,
    now_pct: float,
    now_u95_pct: float = 0.0,
    *,
    aim_pct: float | None = None,
    liquid: str | None = None,
    volume_ml: float | None = None,
    tank_u_ml: float | None = None,
) -> Plan:
    """The dose that leads from here to `aim_pct`, or what `volume_ml` of a liquid would do.

    Parameters
    ----------
    bench, tank : the settings, and the tank's name in them
    tank_ml : what the tank holds now; None or NaN: the bench's volume_ml
    now_pct, now_u95_pct : salinity of the tank now and its expanded uncertainty, %
    aim_pct : where to, %; `liquid` then says which one to use, None leaves the choice
    volume_ml : instead of an aim: how much of `liquid` to give
    tank_u_ml : standard uncertainty of what it holds; None: as in the bench

    Raises
    ------
    PlanError
        If it cannot be done; one line says why and what could be.
    """
    if not math.isfinite(now_pct + now_u95_pct):
        raise PlanError(f"tank {tank}: no salinity now; expected one to plan from")
    settings = bench.tank[tank]
    holds = settings.volume_ml if tank_ml is None or math.isnan(tank_ml) else tank_ml
    if holds is None or not holds > 0.0:
        raise PlanError(f"tank {tank}: nobody knows what it holds; expected volume_ml, above 0")
    holds_u = settings.volume_u_ml if tank_u_ml is None else tank_u_ml
    if volume_ml is not None and liquid is not None:
        ways = {liquid: volume_ml}
    elif aim_pct is not None:
        ways = _ways(bench, settings, tank, holds, now_pct, aim_pct, liquid)
        liquid = _chosen(bench, ways)
    else:
        raise PlanError("no aim; expected one, or a liquid and a volume")
    assert liquid is not None
    _fits(tank, settings, holds, liquid, ways[liquid])
    whole = Known(holds, holds_u)
    before = Known(now_pct, now_u95_pct / K95)
    others = {name: ml for name, ml in ways.items() if name != liquid}
    return _planned(bench, tank, whole, before, liquid, ways[liquid], others)


def _ways(
    bench: Bench,
    settings: Tank,
    tank: str,
    tank_ml: float,
    now_pct: float,
    aim_pct: float,
    only: str | None,
) -> dict[str, float]:
    """How much of which liquid leads there. Raises PlanError if none does."""
    if aim_pct == now_pct:
        raise PlanError(f"tank {tank} is at {aim_pct:g} % already; no dose")
    at_hand = {n: q for n, q in bench.liquid.items() if only is None or n == only}
    needed = {
        name: volume_for(settings.mode, now_pct, aim_pct, tank_ml, each.salinity_pct)
        for name, each in at_hand.items()
    }
    ways = {name: ml for name, ml in needed.items() if math.isfinite(ml)}
    if not ways:
        said = ", ".join(f"{n} {q.salinity_pct:g} %" for n, q in at_hand.items()) or "none"
        side = "saltier" if aim_pct > now_pct else "fresher"
        raise PlanError(
            f"{aim_pct:g} % cannot be reached from {now_pct:g} %; at hand: {said};"
            f" expected a liquid {side} than {aim_pct:g} %"
        )
    return ways


def _chosen(bench: Bench, ways: Mapping[str, float]) -> str:
    """The liquid of which the least is needed, as long as that can be measured out."""
    fair = [name for name, ml in ways.items() if _measurable(_valve(bench, name), ml)]
    return min(fair or [max(ways, key=ways.__getitem__)], key=ways.__getitem__)


def _measurable(valve: _Valve | None, volume_ml: float) -> bool:
    if valve is None:
        return volume_ml >= LEAST_ML
    return LEAST_S <= valve.flow.open_s(volume_ml) < math.inf


def _fits(tank: str, settings: Tank, tank_ml: float, liquid: str, volume_ml: float) -> None:
    if volume_ml <= MOST_TANKS[settings.mode] * tank_ml:
        return
    more = "more than doubles it" if settings.mode == "grows" else "is more than a flushing"
    raise PlanError(
        f"tank {tank}: {volume_ml:.0f} mL of {liquid} into {tank_ml:.0f} mL {more};"
        " expected a stronger liquid, or a water change first"
    )


def _planned(
    bench: Bench,
    tank: str,
    tank_ml: Known,
    before: Known,
    liquid: str,
    volume_ml: float,
    others: Mapping[str, float],
) -> Plan:
    settings, used = bench.tank[tank], bench.liquid[liquid]
    pure = Known(used.salinity_pct, used.salinity_u_pct)
    lands = landing(settings.mode, before, tank_ml, pure, Known(volume_ml, 0.0))
    change = lands.value - before.value
    steps = steps_of(settings, change)
    ways = stops(before.value, lands.value, steps)
    cut = volumes(settings.mode, ways, tank_ml.value, pure.value, volume_ml)
    valve = _valve(bench, liquid)
    opens = [valve.flow.open_s(ml) for ml in cut] if valve else []
    if not all(math.isfinite(each) for each in opens):
        valve, opens = None, []
    volume_u, dof = DOSE_U * volume_ml, math.inf
    if valve is not None:
        volume_u, dof = valve.flow.volume(sum(opens), steps)[1], valve.flow.dof
    known = landing(settings.mode, before, tank_ml, pure, Known(volume_ml, volume_u))
    by_dose = math.sqrt(max(known.u**2 - lands.u**2, 0.0))
    wait = wait_s(settings, change, steps)
    parts = [
        Part(ml, opens[i] if valve else None, wait if i else 0.0, ways[i + 1])
        for i, ml in enumerate(cut)
    ]
    return Plan(
        tank=tank,
        tank_ml=tank_ml.value,
        before_pct=before.value,
        before_u95_pct=K95 * before.u,
        liquid=liquid,
        volume_ml=volume_ml,
        volume_u95_ml=volume_u * _k95(1.0, 1.0, dof),
        valve=valve.name if valve else None,
        open_s=sum(opens) if valve else None,
        predicted_pct=known.value,
        predicted_u95_pct=known.u * _k95(known.u, by_dose, dof),
        volume_rule_off_pct=volume_rule_off(
            settings.mode, before.value, tank_ml.value, pure.value, volume_ml
        ),
        parts=tuple(parts),
        others=others,
    )


def _valve(bench: Bench, liquid: str) -> _Valve | None:
    """The first valve of the bench for this liquid whose runs tell a flow."""
    for name, valve in bench.valve.items():
        if valve.liquid == liquid:
            try:
                return _Valve(name, flow(valve.runs))
            except FlowError:
                continue
    return None


def _k95(u: float, u_dose: float, dof: float) -> float:
    """Coverage factor: 2, or more where few runs of a valve rule (JCGM 100:2008, G.4.1)."""
    if not (math.isfinite(dof) and u_dose > 0.0):
        return K95
    return max(K95, t_quantile(0.975, dof * (u / u_dose) ** 4))

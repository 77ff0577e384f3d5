"""What was put into the tank that one probe hangs in, as its log tells it.

Rules:
- The volume is the running one: in a tank that grows each dose adds to it, each `water` sets or
  changes it. It starts at the bench file's volume_ml, and starts anew only when that is changed.
- A dose recorded over 15 min late, or of an earlier time than the newest one, changes the volume
  only: no rest is said for it.
- A dose struck out counts as not given from there on. Nothing is erased.
- An order's id acts once, however often it is met.
- A dose without volume_u_ml is taken as known to 1 % (common practice, no source).
- Of a liquid or valve that is not on the bench no landing can be said (NaN); a dose whose volume
  cannot be said either leaves the tank's volume as it was.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

from monitor.bench import Bench
from monitor.blocks import NAN, Event, Second
from monitor.dosing.balance import Known, landing
from monitor.dosing.valve import FlowError, flow

LATE_S = 900.0
DOSE_U = 0.01  # of the volume, where no doubt is stated
IDS_KEPT = 64
CARRIED = 8  # newest doses that a later run may have to strike out, or see answered


@dataclass(frozen=True)
class Dose:
    """An addition, as met in the log. Volumes mL, salinities %, NaN where unknown."""

    time_s: float  # when it began to run in
    open_s: float  # how long it ran in; 0 = poured at once
    volume_ml: float
    volume_u_ml: float
    liquid: str
    liquid_pct: float
    liquid_u_pct: float
    tank_ml: float  # before it
    tank_u_ml: float
    mode: str
    key: str  # the order's id, or its TIME
    met_k: int  # the second in which it was met
    counts: bool  # False: the volume only

    @property
    def end_s(self) -> float:
        """When it had run in."""
        return self.time_s + self.open_s

    def landing(self, before_pct: float, before_u_pct: float) -> tuple[float, float]:
        """Where the mass balance says it lands, and the standard uncertainty, %."""
        known = landing(
            self.mode,
            Known(before_pct, before_u_pct),
            Known(self.tank_ml, self.tank_u_ml),
            Known(self.liquid_pct, self.liquid_u_pct),
            Known(self.volume_ml, self.volume_u_ml),
        )
        return known.value, known.u


@dataclass(frozen=True)
class Struck:
    """A dose that counts as not given from here on."""

    dose: Dose
    met_k: int


@dataclass(frozen=True)
class Water:
    """Water that is no dose: changed, siphoned, topped up. The tank holds `tank_ml` after it."""

    time_s: float
    tank_ml: float
    key: str
    met_k: int


Change = Dose | Struck | Water


class Ledger:
    """The tank's additions and its running volume."""

    def __init__(self, bench: Bench, tank: str, carried: Mapping[str, Any] | None) -> None:
        """Begin with the bench file's volume, or with what the run before had made of it."""
        self._bench = bench
        self._tank = tank
        self._settings = bench.tank[tank]
        start = NAN if self._settings.volume_ml is None else self._settings.volume_ml
        carried = carried or {}
        self.tank_ml, self.tank_u_ml = start, self._settings.volume_u_ml
        if "tank_ml" in carried and carried.get("volume_ml") == self._settings.volume_ml:
            self.tank_ml = NAN if carried["tank_ml"] is None else carried["tank_ml"]
            self.tank_u_ml = carried.get("tank_u_ml", self.tank_u_ml)
        self.doses = [carried_dose(each) for each in carried.get("doses", ())]
        self._newest_t = max((dose.time_s for dose in self.doses), default=-math.inf)
        self._met = dict.fromkeys(carried.get("met", ()))  # a set that keeps its order

    def step(self, second: Second) -> tuple[Change, ...]:
        """What this second's events changed in this tank, in their order."""
        if not second.events:
            return ()
        changes = (self._meet(event, second) for event in second.events)
        return tuple(change for change in changes if change is not None)

    def carry(self) -> dict[str, Any]:
        """The running volume and the bench's it began with, the newest doses, ids already met."""
        return {
            "volume_ml": self._settings.volume_ml,
            "tank_ml": None if math.isnan(self.tank_ml) else self.tank_ml,
            "tank_u_ml": self.tank_u_ml,
            "doses": [plain_dose(dose) for dose in self.doses[-CARRIED:]],
            "met": list(self._met),
        }

    def _meet(self, event: Event, second: Second) -> Change | None:
        if event.kind not in ("dose", "strike", "water"):
            return None
        fields = event.fields
        if fields.get("tank", self._tank) != self._tank:
            return None
        if not self._first_time(event):
            return None
        if event.kind == "dose":
            return self._dose(event, second)
        if event.kind == "strike":
            return self._strike(str(fields["of"]), second.k)
        return self._water(event, second.k)

    def _first_time(self, event: Event) -> bool:
        """Whether this order was not met before."""
        key = event.fields.get("id")
        if key is None:
            return True
        if key in self._met:
            return False
        self._met[key] = None
        if len(self._met) > IDS_KEPT:
            del self._met[next(iter(self._met))]
        return True

    def _dose(self, event: Event, second: Second) -> Dose | None:
        volume, u, open_s, liquid = self._amount(event.fields)
        if volume <= 0.0:
            return None
        known = self._bench.liquid.get(liquid)
        late = second.t - event.time_s > LATE_S or event.time_s < self._newest_t
        dose = Dose(
            time_s=event.time_s,
            open_s=open_s,
            volume_ml=volume,
            volume_u_ml=u,
            liquid=liquid,
            liquid_pct=known.salinity_pct if known else NAN,
            liquid_u_pct=known.salinity_u_pct if known else NAN,
            tank_ml=self.tank_ml,
            tank_u_ml=self.tank_u_ml,
            mode=self._settings.mode,
            key=str(event.fields.get("id") or f"{event.time_s:.3f}"),
            met_k=second.k,
            counts=not late,
        )
        self._newest_t = max(self._newest_t, dose.time_s)
        self.doses = [*self.doses[-63:], dose]
        self._add(dose.volume_ml, dose.volume_u_ml)
        return dose

    def _amount(self, fields: Mapping[str, Any]) -> tuple[float, float, float, str]:
        """Volume and its standard uncertainty (mL), open time (s) and liquid of a dose event."""
        open_s = float(fields.get("open_s") or 0.0)
        liquid = str(fields.get("liquid", ""))
        valve = self._bench.valve.get(str(fields.get("valve")))
        if valve is not None:
            liquid = liquid or valve.liquid
        volume, u = fields.get("volume_ml"), fields.get("volume_u_ml")
        if volume is None:
            try:
                volume, valve_u = flow(valve.runs if valve else ()).dose(open_s)
            except FlowError:
                return NAN, NAN, open_s, liquid
            u = valve_u if u is None else u
        return float(volume), float(DOSE_U * volume if u is None else u), open_s, liquid

    def _strike(self, of: str, k: int) -> Struck | None:
        """Take back the dose of this id, or of this TIME."""
        for dose in reversed(self.doses):
            if of == dose.key or _is_time(of, dose.time_s):
                self.doses = [each for each in self.doses if each is not dose]
                self._newest_t = max((each.time_s for each in self.doses), default=-math.inf)
                self._add(-dose.volume_ml, -dose.volume_u_ml)
                return Struck(dose, k)
        return None

    def _water(self, event: Event, k: int) -> Water:
        fields = event.fields
        u = fields.get("u_ml")
        if fields.get("volume_ml") is not None:
            self.tank_ml = float(fields["volume_ml"])
            self.tank_u_ml = float(u) if u is not None else self._settings.volume_u_ml
        else:
            into, out = float(fields.get("in_ml") or 0.0), float(fields.get("out_ml") or 0.0)
            full = self.tank_ml if self._settings.mode == "overflows" else math.inf
            left = max(self.tank_ml - out, 0.0)
            self.tank_ml = min(left + into, max(full, self._settings.volume_ml or 0.0))
            self.tank_u_ml = math.hypot(self.tank_u_ml, DOSE_U * (into + out) if u is None else u)
        key = str(fields.get("id") or f"{event.time_s:.3f}")
        return Water(event.time_s, self.tank_ml, key, k)

    def _add(self, volume_ml: float, u_ml: float) -> None:
        if self._settings.mode != "grows" or math.isnan(volume_ml):
            return
        self.tank_ml += volume_ml
        variance = self.tank_u_ml**2 + math.copysign(u_ml**2, u_ml)
        self.tank_u_ml = math.sqrt(max(variance, 0.0))


def _is_time(of: str, time_s: float) -> bool:
    try:
        return abs(float(of) - time_s) < 5e-4
    except ValueError:
        return False


def plain_dose(dose: Dose) -> dict[str, Any]:
    """The dose as JSON-able fields; what is unknown is null."""
    return {k: None if v != v else v for k, v in asdict(dose).items()}


def carried_dose(fields: Mapping[str, Any]) -> Dose:
    """The dose back from its fields."""
    known: dict[str, Any] = {k: NAN if v is None else v for k, v in fields.items()}
    return Dose(**known)

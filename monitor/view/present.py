"""What is so now of one probe in its tank, read from its judges when it is asked for."""

from __future__ import annotations

from monitor.bench import Bench
from monitor.blocks import NAN, Floats, Second
from monitor.chain import Judges
from monitor.findings import Finding, shifted
from monitor.view.marks import Span


class Present:
    """Settings, belief, value and movement as the newest judged second left them."""

    def __init__(self, probe: str, bench: Bench | None = None, mark: str = "") -> None:
        """`bench`: the settings, where they are known before the log tells them.

        `mark`: tells this lane from another of the same probe.
        """
        self.mark = mark
        self.probe = probe
        self.bench = bench
        self.offset_s = 0.0
        self.link_lost: Span | None = None
        self._judges: Judges | None = None
        self._second: Second | None = None

    @property
    def tank(self) -> str:
        """The tank's name; the probe's own until that is known."""
        bench = self.settings
        return bench.probe[self.probe].tank if bench else self.probe

    @property
    def label(self) -> str:
        """What a person calls it: as it stands in the bench file, not yet safe to print."""
        bench = self.settings
        label = (bench and bench.tank[self.tank].label) or self.tank
        return f"{self.mark}: {label}" if self.mark else label

    @property
    def settings(self) -> Bench | None:
        """The settings in force."""
        return self._judges.bench if self._judges else self.bench

    @property
    def medium(self) -> str:
        """The salt's name."""
        return self.settings.probe[self.probe].medium if self.settings else "NaCl"

    @property
    def aim(self) -> tuple[float, float] | None:
        """The band that is aimed at, %."""
        return self.settings.tank[self.tank].aim_pct if self.settings else None

    @property
    def band(self) -> float:
        """What counts as rest, +- %."""
        return self.settings.tank[self.tank].rest_band_pct if self.settings else NAN

    @property
    def calibrated(self) -> bool:
        """Whether there is a salinity; if not, values are periods in us."""
        if self._judges is None:
            return bool(self.bench and self.bench.probe[self.probe].standards_in_force)
        return self._judges.calibration is not None

    @property
    def begun(self) -> bool:
        """Whether anything was judged yet."""
        return self._judges is not None

    @property
    def belief(self) -> str:
        """believed, doubtful or not-believed."""
        return self._judges.trust.belief if self._judges else "believed"

    @property
    def why(self) -> str:
        """Why it is believed so."""
        return self._judges.trust.why if self._judges else ""

    @property
    def since_t(self) -> float:
        """Since when it is believed so."""
        return self._judges.trust.since + self.offset_s if self._judges else NAN

    @property
    def faults(self) -> list[Finding]:
        """Faults in force, the oldest first."""
        if self._judges is None:
            return []
        told = [shifted(f, self.offset_s) for f in self._judges.trust.faults.values()]
        return sorted(told, key=lambda fault: float(fault["from_t"]))

    @property
    def value(self) -> float:
        """The filtered salinity in %, or the period in us; NaN where there is none to show."""
        if self._judges is None or self._second is None:
            return NAN
        if not self.calibrated:
            return self._second.mean_us
        trust = self._judges.trust
        gone = trust.out or trust.belief == "not-believed" or self.link_lost is not None
        return NAN if gone else self._judges.settling.shown_pct

    @property
    def u95(self) -> float:
        """Doubt of the value, %."""
        return self._judges.settling.u95_pct if self._judges and self.calibrated else NAN

    @property
    def moving(self) -> bool:
        """Whether a change is under way."""
        return self._judges.settling.moving if self._judges else False

    @property
    def rest(self) -> Finding | None:
        """The rest in force."""
        rest = self._judges.settling.at_rest if self._judges else None
        return shifted(rest, self.offset_s) if rest else None

    @property
    def outlook(self) -> Finding | None:
        """The newest outlook of the change under way."""
        outlook = self._judges.settling.outlook if self._judges else None
        return shifted(outlook, self.offset_s) if outlook else None

    @property
    def tank_ml(self) -> float:
        """Running volume, mL; NaN where it is not known."""
        ml = self._judges.ledger.tank_ml if self._judges else None
        return NAN if ml is None else ml

    @property
    def tank_u_ml(self) -> float:
        """Its standard uncertainty, mL."""
        return self._judges.ledger.tank_u_ml if self._judges else NAN

    def salinity_of(self, period_us: Floats, temp_c: Floats) -> Floats:
        """Values of raw readings, (n,): salinities, or the periods themselves."""
        judges = self._judges
        if judges is None or judges.calibration is None or judges.temp_c is None:
            return period_us
        held = temp_c.copy()
        held[held != held] = judges.temp_c
        return judges.calibration.salinity_pct(period_us, held)

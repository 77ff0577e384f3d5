"""How a dose is answered while the period creeps up: tells a fouled probe from diluted water.

A fouled probe reads too low before and after, and a saline dose moves it by less than mass balance
says of the reading; diluted water is read right and moves as it should. Each dose gives a log
likelihood ratio; they add up until one cause has it. A weak answer alone is never fouling: a
short dose looks the same.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from monitor.blocks import NAN
from monitor.dosing.ledger import Dose
from monitor.trust.intake import POWER

DECIDED = 3.0  # of the summed log likelihood ratio: odds of 20
OFF = 4.0  # doubts: a dose that fits neither cause was wrong itself

WIDEN = 1.5
STEP_U = (0.01, 0.005, 0.01)  # of the step: volume, liquid, calibration
READING_U = 0.0005  # of the reading
CREEP_U = 0.15  # of what creeps on while the dose mixes


@dataclass(frozen=True)
class Asked:
    """A dose given while fouling was in force: the state before it."""

    dose: Dose
    salinity_pct: float  # read before it
    cost: float  # ln period risen so far
    slope: float  # ln period an hour
    slope_u: float
    t: float  # when it was read
    reading_u: float = 0.0  # relative, common to before and after: no thermometer


def favours_fouling(asked: Asked, after_pct: float, t: float) -> float:
    """Log likelihood ratio of fouling against fresh water.

    NaN if the dose fits neither, or its liquid's salinity or the tank's volume is unknown.

    Parameters
    ----------
    after_pct : salinity read once the dose has mixed
    t : s, when
    """
    dose, read = asked.dose, asked.salinity_pct
    hours = (t - asked.t) / 3600.0
    creep = asked.slope * hours
    lost = asked.cost / POWER
    landed, _ = dose.landing(read * math.exp(lost), 0.0)
    fouled = landed * math.exp(-lost - creep / POWER)
    # Fresh water also fills the tank, unless as much runs out: half of it, and that in doubt.
    fuller = replace(dose, tank_ml=dose.tank_ml * (1.0 + 0.5 * lost))
    diluted = fuller.landing(read, 0.0)[0] * (1.0 - creep / POWER)
    step = abs(landed - read * math.exp(lost))
    creep_u = math.hypot(asked.slope_u * hours, CREEP_U * creep)
    here, more = (dose.landing(scale * read, 0.0)[0] for scale in (1.0, 1.01))
    added = here - (more - here) / 0.01  # the liquid's own part, which no reading's error scales
    common_u = asked.reading_u * added
    noise_u = READING_U * read
    u = WIDEN * math.hypot(step * math.hypot(*STEP_U), noise_u, creep_u * read, common_u)
    u_diluted = math.hypot(u, 0.3 * lost * step)
    z_fouled, z_diluted = (after_pct - fouled) / u, (after_pct - diluted) / u_diluted
    if min(abs(z_fouled), abs(z_diluted)) > OFF:
        return NAN
    return 0.5 * (z_diluted**2 - z_fouled**2) + math.log(u_diluted / u)

"""What people commonly use instead, for comparison: lines, t0 + g/k, ln on ln, interpolation.

Temperature is taken out of the period the common way, by scaling it with the medium's factor.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

import numpy as np

from monitor.blocks import Floats
from monitor.calibration.line import line
from monitor.water import medium

if TYPE_CHECKING:
    from monitor.bench import Standard

Candidate = Callable[[Floats, Floats], Floats]  # periods us, temperatures C -> salinities %


def candidates(standards: Sequence[Standard], of: str) -> dict[str, Candidate]:
    """Each candidate fitted to three standards or more, by name; those of 0 % are left aside."""
    law = medium(of)
    used = [s for s in standards if s.salinity_pct > 0]
    salinity = np.array([s.salinity_pct for s in used])
    temp = np.array([25.0 if s.temp_c is None else s.temp_c for s in used])
    at_25 = np.array([s.period_us for s in used]) * law.factor(temp)
    conductivity = law.conductivity_25_ms(salinity)
    s_on_p = line(at_25, salinity)
    p_on_s = line(salinity, at_25)
    cell = line(1 / conductivity, at_25, 1 / at_25**2)
    ln_ln = line(np.log(at_25), np.log(salinity))
    order = np.argsort(at_25)
    knots = np.log(at_25[order]), np.log(salinity[order])

    def at(period_us: Floats, temp_c: Floats) -> Floats:
        return np.asarray(period_us * law.factor(temp_c))

    return {
        "line, S on P": lambda p, t: s_on_p.a + s_on_p.b * at(p, t),
        "line, P on S": lambda p, t: (at(p, t) - p_on_s.a) / p_on_s.b,
        "t0 + g/k": lambda p, t: law.salinity_pct(
            np.maximum(cell.b / np.maximum(at(p, t) - cell.a, 1e-9), 0.0)
        ),
        "ln S on ln P": lambda p, t: np.exp(ln_ln.a + ln_ln.b * np.log(at(p, t))),
        "interpolated": lambda p, t: np.exp(np.interp(np.log(at(p, t)), *knots)),
    }

"""The oscillator that the virtual probe and the model stand for: period against conductance."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.bench import Standard
from monitor.calibration import fit
from monitor.water import medium
from tests.reference.tables import checks, rows


@pytest.mark.parametrize("ra", [50.0, 300.0, 1000.0])
def test_the_model_holds_for_an_ideal_555_astable(ra: float) -> None:
    """T = ln 2 (RA + 2 RB) C with the probe as RB: t0 and one over conductance, exactly."""
    checks("TI NA555/NE555 data sheet SLFS022I, astable operation: T = ln2 (RA + 2 RB) C")
    law = medium("NaCl")
    c, cell_per_cm = 1e-7, 1.0
    levels = np.array([0.025, 0.05, 0.075, 0.1, 0.125, 0.15])

    def period_us(salinity: float) -> float:
        k_ms = float(law.conductivity_25_ms(np.array([salinity]))[0]) + 0.0015
        return math.log(2) * (ra + 2 * 1000 * cell_per_cm / k_ms) * c * 1e6

    standards = [
        Standard(salinity_pct=s, period_us=period_us(s), sd_us=0.1, readings=100, temp_c=25.0)
        for s in levels.tolist()
    ]
    made = fit(standards, "NaCl", 0.0)
    for salinity in (0.03, 0.06, 0.11, 0.14):
        read = made.salinity_pct(np.array([period_us(salinity)]), np.array([25.0]))[0]
        assert read == pytest.approx(salinity, rel=3e-4)
    assert made.theta[0] == pytest.approx(math.log(2) * ra * c * 1e6, abs=12.0)


def test_period_of_the_published_circuits() -> None:
    checks("the same formula, component values of the data sheets, in both directions")
    for row in rows("555_astable.csv"):
        ra, rb, c = (float(row[name]) for name in ("RA_ohm", "RB_ohm", "C_F"))
        assert math.log(2) * (ra + 2 * rb) * c == pytest.approx(float(row["T_s"]), rel=1e-6)

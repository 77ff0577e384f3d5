"""Water's laws: the polynomial back, the slopes, the units into one another."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.water import OutOfRangeError, medium, nacl, units


def test_back_polynomial_is_the_inverse() -> None:
    conductivity = np.linspace(0.0, nacl.LIMIT_MS, 4001)
    salinity = nacl.salinity_pct(conductivity)
    assert salinity[0] == 0
    again = nacl.conductivity_25_ms(salinity)
    np.testing.assert_allclose(again[1:], conductivity[1:], rtol=1e-6)


@pytest.mark.parametrize("name", ["NaCl", "sea salt"])
@pytest.mark.parametrize("k", [0.05, 0.5, 2.0, 4.5])
def test_slope_is_the_derivative(name: str, k: float) -> None:
    law = medium(name)
    step = 1e-4
    ends = law.salinity_pct(np.array([k - step, k + step]))
    assert law.slope(k) == pytest.approx((ends[1] - ends[0]) / (2 * step), rel=1e-4)


@pytest.mark.parametrize("name", ["NaCl", "sea salt"])
@pytest.mark.parametrize("temp", [10.0, 20.0, 25.0, 31.5])
def test_sensitivity_is_the_factors_derivative(name: str, temp: float) -> None:
    law = medium(name)
    factor, relative = law.sensitivity(temp)
    ends = law.factor(np.array([temp - 1e-3, temp, temp + 1e-3]))
    assert factor == pytest.approx(ends[1], rel=1e-14)
    assert relative == pytest.approx((ends[2] - ends[0]) / 2e-3 / factor, rel=1e-6)


@pytest.mark.parametrize("name", ["NaCl", "sea salt"])
def test_units_go_there_and_back(name: str) -> None:
    law = medium(name)
    salinity = np.linspace(0.01, 0.25, 25)
    temp = np.linspace(12.0, 33.0, 25)
    litre = units.g_per_l_from_pct(salinity, temp, law)
    np.testing.assert_allclose(units.pct_from_g_per_l(litre, temp, law), salinity, rtol=1e-12)
    assert (litre < units.g_per_kg_from_pct(salinity) * 1.002).all()
    ms = units.ms_per_cm_from_pct(salinity, law)
    np.testing.assert_allclose(units.pct_from_ms_per_cm(ms, law), salinity, rtol=1e-6)
    grams = units.g_per_kg_from_pct(salinity)
    np.testing.assert_allclose(units.pct_from_g_per_kg(grams), salinity, rtol=1e-15)


def test_what_is_beyond_the_law_is_refused_in_one_line() -> None:
    law = medium("NaCl")
    with pytest.raises(OutOfRangeError, match=r"expected 0 to 5 mS/cm"):
        units.ms_per_cm_from_pct(np.array([0.1, 0.4]), law)
    with pytest.raises(OutOfRangeError):
        units.pct_from_ms_per_cm(np.array([-0.1]), law)
    with pytest.raises(OutOfRangeError, match="expected one of NaCl, sea salt"):
        medium("sugar")


@pytest.mark.parametrize("name", ["NaCl", "sea salt"])
def test_next_to_no_salt_at_all(name: str) -> None:
    law = medium(name)
    read = law.salinity_pct(np.array([0.0, 1e-6, 1e-3, 2e-3, 0.01, np.nan]))
    assert read[0] == 0
    assert (np.diff(read[:5]) >= 0).all()
    assert read[3] > 0
    assert np.isnan(read[5])
    assert 0.02 < law.slope(0.0) < 0.06

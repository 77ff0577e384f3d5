"""Conductivity, temperature, density and units against handbook tables and TEOS-10.

Each data file names its source in full and how far it was verified.
"""

from __future__ import annotations

import gsw
import numpy as np
import pytest

from monitor.water import medium, nacl, sea_salt, units
from monitor.water.density import nacl_g_ml, water_g_ml
from tests.reference.tables import checks, figures, rows

NACL, SEA = medium("NaCl"), medium("sea salt")


def column(table: list[dict[str, str]], name: str) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return np.array([float(row[name]) for row in table])


def test_nacl_conductivity_at_25_c() -> None:
    checks("CRC Handbook, equivalent conductivity of electrolytes (Vanysek), absolute column")
    table = [r for r in rows("molar_conductivity_25C.csv") if r["salt"] == "NaCl"][1:]
    c = column(table, "c_mol_L")
    salinity = c * nacl.MOLAR_MASS_G / 10 / 0.99705  # first guess, then the density of the law
    for _ in range(5):
        salinity *= c / nacl.molarity(salinity)
    conductivity = nacl.conductivity_25_ms(salinity)
    np.testing.assert_allclose(conductivity, column(table, "kappa_uS_cm") / 1000, rtol=2e-4)


def test_nacl_conductivity_against_the_second_model() -> None:
    checks("McCleskey et al. 2012 as recomputed: 0.3 to 0.9 % above the classical table")
    table = rows("nacl_vs_pss78.csv")
    salinity = column(table, "NaCl_g_per_kg_solution") / 10
    ratio = column(table, "kappa25_McCleskey_mS_cm") / nacl.conductivity_25_ms(salinity)
    assert ((ratio > 1.0) & (ratio < 1.010)).all()
    np.testing.assert_allclose(
        nacl.conductivity_25_ms(salinity), column(table, "kappa25_mS_cm_from_table"), rtol=1e-3
    )


def test_nacl_conductivity_at_20_c_by_mass_per_cent() -> None:
    checks(
        "CRC Handbook, electrical conductivity of aqueous solutions (2 to 3 digits, from memory)"
    )
    table = [r for r in rows("conductivity_20C_mass_percent.csv") if r["salt"] == "NaCl"]
    half = next(r for r in table if float(r["mass_percent"]) == 0.5)
    conductivity = nacl.conductivity_25_ms(np.array([0.5])) * NACL.factor(np.array([20.0]))
    assert conductivity[0] == pytest.approx(float(half["kappa20_mS_cm"]), rel=0.02)


def test_temperature_factor_of_nacl() -> None:
    checks("f25 of NaCl at 2 g/kg recomputed from McCleskey et al. 2012; ISO 7888 beside it")
    table = [r for r in rows("temperature_compensation_f25.csv") if 10 <= float(r["t_C"]) <= 35]
    temp = column(table, "t_C")
    f25 = 1 / NACL.factor(temp)
    np.testing.assert_allclose(f25, column(table, "f25_NaCl_2g_per_kg"), rtol=1.5e-4)
    off = column(table, "f25_ISO7888_natural_water") / f25 - 1  # natural water is not NaCl
    assert off[temp == 10.0][0] == pytest.approx(0.0116, abs=0.001)
    assert off[temp == 30.0][0] == pytest.approx(-0.0030, abs=0.001)


def test_slope_of_the_temperature_factor() -> None:
    checks("alpha of NaCl at 25 C and secants, recomputed from McCleskey et al. 2012")
    table = rows("linear_alpha_ref25.csv")
    row = next(r for r in table if r["solute"] == "NaCl" and r["molality_mol_kg"] == "0.0342")
    assert 100 * NACL.sensitivity(25.0)[1] == pytest.approx(float(row["alpha_local_25C"]), abs=0.03)
    for temp in (10, 15, 20, 30, 35):
        secant = 100 * (NACL.sensitivity(float(temp))[0] - 1) / (temp - 25)
        assert secant == pytest.approx(float(row[f"secant_{temp}C"]), abs=0.03)


def test_density_of_nacl_at_20_c() -> None:
    checks("CRC Handbook 102nd ed., concentrative properties of aqueous solutions")
    table = rows("nacl_density_mass_percent.csv")
    salinity = column(table, "mass_percent")
    density = nacl_g_ml(salinity, np.full_like(salinity, 20.0))
    limit = np.where(salinity <= 10, 3e-4, 6e-4)
    assert (np.abs(density - column(table, "density20_CRC")) <= limit).all()
    litre = units.g_per_l_from_pct(salinity, np.full_like(salinity, 20.0), NACL) / 58.4428
    np.testing.assert_allclose(litre, column(table, "molarity_mol_L"), rtol=6e-4, atol=5e-4)


def test_density_of_nacl_at_other_temperatures() -> None:
    checks("Rogers and Pitzer, J. Phys. Chem. Ref. Data 11, 15 (1982), 20 to 30 C")
    table = [r for r in rows("nacl_specific_volume_rogers_pitzer.csv") if float(r["t_C"]) >= 20]
    table = [r for r in table if float(r["mass_percent"]) <= 26]
    density = nacl_g_ml(column(table, "mass_percent"), column(table, "t_C"))
    np.testing.assert_allclose(density * 1000, column(table, "density_RP_kg_m3"), atol=0.35)


def test_density_model_is_the_published_one() -> None:
    checks("Laliberte and Cooper, J. Chem. Eng. Data 49, 1141 (2004), as recomputed")
    published = figures("laliberte_cooper_nacl.json")
    for name, by_temp in published["check_values_kg_m3"].items():
        salinity = 100 * float(name.removeprefix("w="))
        for temp, density in by_temp.items():
            found = float(nacl_g_ml(np.array([salinity]), np.array([float(temp)]))[0])
            assert 1000 * found == pytest.approx(density, abs=0.02)
    for temp, density in published["water_density_kg_m3_in_model"].items():
        assert 1000 * float(water_g_ml(np.array([float(temp)]))[0]) == pytest.approx(
            density, abs=0.02
        )


def test_practical_salinity_checks_of_unesco() -> None:
    checks("UNESCO Technical Papers in Marine Science 44 (1983), through the library in use")
    published = figures("pss78_unesco_checks.json")
    for row in published["salinity"]:
        found = gsw.SP_from_C(
            row["R"] * published["C_35_15_0_mS_cm"], row["t68_C"] / 1.00024, row["p_dbar"]
        )
        assert found == pytest.approx(row["S"], abs=1e-5 if row["S"] == 40 else 1e-6)


def test_sea_salt_low_range() -> None:
    checks("TEOS-10 GSW C_from_SP: PSS-78 with the extension of Hill et al. 1986 below 2")
    table = [r for r in rows("pss78_gsw_low_salinity.csv") if r["t90_C"] == "25"]
    salinity = column(table, "SP") / sea_salt.PRACTICAL_PER_PCT
    conductivity = SEA.conductivity_25_ms(salinity)
    np.testing.assert_allclose(conductivity, column(table, "C_mS_cm"), atol=6e-7)
    np.testing.assert_allclose(SEA.salinity_pct(conductivity), salinity, atol=1e-9)


def test_sea_salt_temperature_factor() -> None:
    checks("TEOS-10 GSW at practical salinity 1: conductivity at t over that at 25 C")
    table = [r for r in rows("pss78_gsw_low_salinity.csv") if float(r["SP"]) == 1.0]
    at_25 = float(next(r["C_mS_cm"] for r in table if r["t90_C"] == "25"))
    table = [r for r in table if 15 <= float(r["t90_C"]) <= 30]
    ratio = column(table, "C_mS_cm") / at_25
    np.testing.assert_allclose(SEA.factor(column(table, "t90_C")), ratio, rtol=1e-4)


def test_sea_salt_is_not_nacl() -> None:
    checks("computed, not published: NaCl read through PSS-78, -1 % at 0.1 and +1 % at 1 g/kg")
    for row in rows("nacl_vs_pss78.csv"):
        salinity = np.array([float(row["NaCl_g_per_kg_solution"]) / 10])
        if salinity[0] > 0.25:
            continue
        as_sea = SEA.salinity_pct(NACL.conductivity_25_ms(salinity)) * sea_salt.PRACTICAL_PER_PCT
        assert as_sea[0] == pytest.approx(float(row["SP_if_PSS78_applied"]), rel=2e-3)


def test_seawater_density() -> None:
    checks("EOS-80, UNESCO 44 (1983), from memory there; TEOS-10 differs by its own 0.02 kg/m3")
    for row in figures("pss78_unesco_checks.json")["density_EOS80_kg_m3_p0"]:
        salinity = np.array([row["S"] / sea_salt.PRACTICAL_PER_PCT])
        temp = np.array([row["t68_C"] / 1.00024])
        assert 1000 * float(SEA.density_g_ml(salinity, temp)[0]) == pytest.approx(
            row["rho"], abs=0.05
        )

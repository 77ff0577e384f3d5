"""The bench file that belongs to virtual probes: standards read with them, liquids, tanks."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from drivers.virtual_tank.mixing import Floats
from drivers.virtual_tank.probe import Circuit, Probe
from monitor.water import medium

STANDARDS_PCT = (0.025, 0.05, 0.075, 0.1, 0.125, 0.15)
READINGS = 120
MIXED_WITHIN = 0.0003  # standard deviation of a standard's own salinity, share of it
LIQUIDS = {"saline": (0.15, 0.0005), "deionised": (0.0, 0.0001)}  # %, its standard uncertainty


def probe_text(name: str, tank: str, probe: Probe, rng: np.random.Generator, port: str = "") -> str:
    """The tables of one probe, its standards read with this very probe near 25 C."""
    out = [f"[probe.{name}]", f'tank = "{tank}"', f"tick_us = {probe.tick_us}", 'medium = "NaCl"']
    out += [f'port = "{port}"'] if port else []
    for pct in STANDARDS_PCT:
        temp_c = round(25.0 + 0.15 * rng.standard_normal(), 2)
        true_pct = pct * (1 + MIXED_WITHIN * rng.standard_normal())
        period = probe.circuit.period_us(np.full(READINGS, true_pct), np.full(READINGS, temp_c))
        period *= np.exp(probe.white * rng.standard_normal(READINGS))
        period = np.rint(period / probe.tick_us) * probe.tick_us
        out += [f"[[probe.{name}.standard]]", f"salinity_pct = {pct}"]
        out += [f"period_us = {period.mean():.3f}", f"sd_us = {period.std(ddof=1):.4f}"]
        out += [f"readings = {READINGS}", f"temp_c = {temp_c}"]
    return "\n".join(out) + "\n"


def tank_text(name: str, volume_ml: float, mode: str, band_pct: float, label: str = "") -> str:
    """The table of one tank, its volume known to half a per cent."""
    out = [f"[tank.{name}]", f"volume_ml = {volume_ml}", f"volume_u_ml = {0.005 * volume_ml:.4g}"]
    out += [f'mode = "{mode}"', f"rest_band_pct = {band_pct}"]
    out += [f'label = "{label}"'] if label else []
    return "\n".join(out) + "\n"


def liquids_text(liquids: Mapping[str, tuple[float, float]]) -> str:
    """The tables of what is dosed: salinity and its standard uncertainty by name."""
    return "".join(
        f"[liquid.{name}]\nsalinity_pct = {pct}\nsalinity_u_pct = {u}\n"
        for name, (pct, u) in liquids.items()
    )


def circuit_from(standards: list[tuple[float, float, float]]) -> Circuit:
    """The circuit that would read these standards: (salinity_pct, period_us, temp_c) each.

    The best of a grid of t0 and p, by least squares in the logarithm of the period.
    """
    pct, period, temp = (np.array(column) for column in zip(*standards))
    law = medium("NaCl")
    kappa: Floats = (law.conductivity_25_ms(pct) + 0.0015) * law.factor(temp)
    best, least = Circuit(), np.inf
    for t0 in np.linspace(0.0, 0.12, 25) * period.min():
        for p in np.linspace(0.95, 1.0, 26):
            ln_g = np.log(period - t0) + p * np.log(kappa)
            off = float(np.sum(((ln_g - ln_g.mean()) * (period - t0) / period) ** 2))
            if off < least:
                best, least = Circuit(float(t0), float(np.exp(ln_g.mean())), float(p)), off
    return best

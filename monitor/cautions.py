"""The cautions, in plain words, each shown where the person meets the risk."""

from __future__ import annotations

ADVICE = (
    "A reading is advice, not a safety device. Do not let it be the only thing between a fault and"
    " living stock: keep an independent check."
)
SECOND_INSTRUMENT = "Read a second instrument before a large dose."
FAST_CHANGE = (
    "A fast change of salinity can kill stock. Limits differ by species and life stage; the"
    " defaults are suggestions, and a vet or the facility's licensed practice decides. Salt as a"
    " treatment is veterinary practice."
)
ELECTRICITY = (
    "Water beside electricity: extra-low-voltage probe circuit, isolated supply, residual-current"
    " protection (RCD/GFCI) on every mains heater and pump, drip loops; local codes decide."
)
VALVE = (
    "An unattended valve can flood or empty a tank. This program opens none; whoever wires valves"
    " gives them limits of their own."
)
NOT_FOR = "Not for drinking water, medical or legal measurements."

RUN = (ADVICE, ELECTRICITY, NOT_FOR)
DOSE = (FAST_CHANGE, SECOND_INSTRUMENT)
REPORT = (ADVICE, FAST_CHANGE, NOT_FOR)

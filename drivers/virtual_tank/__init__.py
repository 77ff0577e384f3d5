"""A bench in software: tanks that mix, probes that err, faults on order.

The physics is pure and vectorised (mixing, tank, probe, faults): scenes with a known truth are
drawn from it, and `bench` serves the same probes through real pseudo-terminals.
"""

from drivers.virtual_tank.faults import Fault
from drivers.virtual_tank.mixing import FOREIGN, USUAL, Mixing
from drivers.virtual_tank.probe import Circuit, Climate, Probe, Readings
from drivers.virtual_tank.tank import Pour, Tank

__all__ = [
    "FOREIGN",
    "USUAL",
    "Circuit",
    "Climate",
    "Fault",
    "Mixing",
    "Pour",
    "Probe",
    "Readings",
    "Tank",
]

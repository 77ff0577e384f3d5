"""A probe of a bench file and its calibration in force, for the commands that need both."""

from __future__ import annotations

from typing import TYPE_CHECKING

from monitor.commands import Refusal, Wrong

if TYPE_CHECKING:
    from monitor.bench import Bench, Probe
    from monitor.calibration import Calibration


def probe_of(bench: Bench, name: str, file: str) -> Probe:
    """The settings of this probe. Raises Wrong if there is none of that name."""
    if name not in bench.probe:
        known = ", ".join(sorted(bench.probe)) or "none is defined"
        raise Wrong(f"{file}: probe {name[:40]!r}: no such probe; expected one of: {known}")
    return bench.probe[name]


def calibration_of(probe: Probe, name: str, file: str) -> Calibration:
    """The calibration that its standards in force give.

    Raises Wrong without standards, Refusal if they allow no fit.
    """
    from monitor.calibration import CalibrationError, fit

    if not probe.standard:
        raise Wrong(
            f"{file}: probe.{name}.standard: missing; expected standards (stillbrine calibrate)"
        )
    try:
        return fit(probe.standards_in_force, probe.medium, probe.tick_us)
    except CalibrationError as wrong:
        raise Refusal(f"{file}: probe.{name}.standard: {wrong}") from None

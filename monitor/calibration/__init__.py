"""From standards to a calibration, and from a period to a salinity with its doubt."""

from monitor.calibration.calibration import Calibration, CalibrationError
from monitor.calibration.fitting import fit

__all__ = ["Calibration", "CalibrationError", "fit"]

"""From echoes of a pole at known places to the head as it really is."""

from .calibrate import CalibrationReport, CalibrationRow, calibrate_head

__all__ = ["CalibrationReport", "CalibrationRow", "calibrate_head"]

"""Blink analysis, corners, lens, event map, clocks, contrast and defects from a blinking target."""

from hybridtrack.calibration.calibrate import CalibratedView, CalibrationOptions, CalibrationResult, calibrate
from hybridtrack.calibration.summary import summary
from hybridtrack.calibration.view_data import BoardCorners, EventMapFit, LensFit, ViewImages
from hybridtrack.calibration.views import ViewOptions

__all__ = [
    "BoardCorners",
    "CalibratedView",
    "CalibrationOptions",
    "CalibrationResult",
    "EventMapFit",
    "LensFit",
    "ViewImages",
    "ViewOptions",
    "calibrate",
    "summary",
]

"""Fitting a model to a surface of implied volatilities, with errors, bounds and doubts said aloud."""

from __future__ import annotations

from engine.calibration.fit import calibrate
from engine.calibration.records import (
    FELLER,
    LOSSES,
    RESIDUALS,
    WEIGHTS,
    CalibratedSlice,
    Calibration,
    CalibrationSettings,
    CalibrationSlice,
    Prior,
)

__all__ = [
    "FELLER",
    "LOSSES",
    "RESIDUALS",
    "WEIGHTS",
    "CalibratedSlice",
    "Calibration",
    "CalibrationSettings",
    "CalibrationSlice",
    "Prior",
    "calibrate",
]

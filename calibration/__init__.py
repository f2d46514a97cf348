"""Picture of a reference pattern in, metres per pixel out."""

from calibration.errors import CalibrationError, PatternError, QuantityError, ScaleError
from calibration.quantity import parse_quantity, states_uncertainty
from calibration.scale import (
    Distortion,
    PictureScale,
    Scale,
    binned,
    fit_recording,
    read_scale,
    scale_from_json,
    scale_to_json,
    to_metres,
    write_scale,
)

__all__ = [
    "CalibrationError",
    "Distortion",
    "PatternError",
    "PictureScale",
    "QuantityError",
    "Scale",
    "ScaleError",
    "binned",
    "fit_recording",
    "parse_quantity",
    "read_scale",
    "scale_from_json",
    "scale_to_json",
    "states_uncertainty",
    "to_metres",
    "write_scale",
]

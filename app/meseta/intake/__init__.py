"""Files -> TraceSet: readers, calibration, cutting, alignment."""

from meseta.intake.alignment import ALIGNMENT_STATUS, Alignment, align
from meseta.intake.calibration.uncertainty import CalibrationErrors, calibration_errors
from meseta.intake.description import Description, describe
from meseta.intake.files import expand, find_files
from meseta.intake.opening import OpenContext, open_recording
from meseta.intake.reading import read, traces_from
from meseta.intake.recording import RawChannel, Recording

__all__ = [
    "ALIGNMENT_STATUS",
    "Alignment",
    "CalibrationErrors",
    "Description",
    "OpenContext",
    "RawChannel",
    "Recording",
    "align",
    "calibration_errors",
    "describe",
    "expand",
    "find_files",
    "open_recording",
    "read",
    "traces_from",
]

"""The study file: recordings, traces, recipe, decisions and history in one HDF5 file that survives anything."""

from meseta.study.adding import gather
from meseta.study.calibration_check import CalibrationCheck, check_calibration
from meseta.study.files import is_study
from meseta.study.making import create_study
from meseta.study.reading import read, write_study
from meseta.study.study import Study

__all__ = [
    "CalibrationCheck",
    "Study",
    "check_calibration",
    "create_study",
    "gather",
    "is_study",
    "read",
    "write_study",
]

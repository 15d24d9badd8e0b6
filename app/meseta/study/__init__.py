"""The study file: recordings, traces, recipe, decisions and history in one HDF5 file that survives anything."""

from meseta.study.files import is_study
from meseta.study.following import create_study, gather
from meseta.study.reading import read, write_study
from meseta.study.study import Study

__all__ = ["Study", "create_study", "gather", "is_study", "read", "write_study"]

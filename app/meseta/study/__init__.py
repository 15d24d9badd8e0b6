"""The study file: recordings, traces, recipe, decisions and history in one HDF5 file that survives anything."""

from meseta.study.files import is_study
from meseta.study.reading import read
from meseta.study.study import Study, write_study

__all__ = ["Study", "is_study", "read", "write_study"]

"""Small results in the study file: group ``/results``, each with the key that says what it was computed from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

import h5py
import numpy as np
import numpy.typing as npt

from meseta.analysis import Analysis
from meseta.study.columns import write_attribute, write_columns
from meseta.study.strict import group, names, read_array, read_attribute
from meseta.tables import Table

__all__ = ["Outcome", "read_outcomes", "write_outcomes"]

STEPS: Final = ("plateaus", "measures", "selection", "histogram", "peaks")
"""Steps whose tables are kept."""


@dataclass(frozen=True)
class Outcome:
    """The table of one step as it was when the study was written.

    Attributes
    ----------
    key : str
        The result's key; it is still current where ``analysis.key(step)`` is the same.
    columns : mapping of str to array
        The columns of the step's table.
    """

    key: str
    columns: Mapping[str, npt.NDArray[Any]]


def _table_of(result: Any) -> Mapping[str, npt.NDArray[Any]] | None:
    """Return the columns of a result: of a table, of what has a table, of a selection."""
    if isinstance(result, Table):
        return result.columns()
    if hasattr(result, "kept") and hasattr(result, "reason"):
        return {"kept": result.kept, "reason": result.reason, "group": result.group}
    table = getattr(result, "table", None)
    table = table() if callable(table) else table
    return table.columns() if isinstance(table, Table) else None


def write_outcomes(root: h5py.Group, analysis: Analysis) -> None:
    """Write the tables of those steps that are computed already."""
    home = root.create_group("results")
    for step in STEPS:
        columns = _table_of(analysis.result(step)) if analysis.ready(step) else None
        if columns is not None:
            made = home.create_group(step)
            write_attribute(made, "key", analysis.key(step))
            write_columns(made, columns)


def read_outcomes(root: h5py.Group) -> dict[str, Outcome]:
    """Return the tables by step."""
    if "results" not in root:
        return {}
    home = group(root, "results")
    return {step: _read(group(home, step)) for step in names(home)}


def _read(home: h5py.Group) -> Outcome:
    columns = {name: np.asarray(read_array(home, name)) for name in names(home)}
    return Outcome(str(read_attribute(home, "key")), columns)

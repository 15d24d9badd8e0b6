"""The user's own measures: installed functions that add a number to every trace.

A plug-in is an ordinary installed package with an entry point in the group ``meseta.measures``: a function of one
trace's conductance (G0) and drive (both one-dimensional, read-only) that returns a number.  Its name, version and a
hash of its source are written into the notes of the traces, hence into the study; its code never is.
"""

from __future__ import annotations

import hashlib
import inspect
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from importlib.metadata import entry_points
from pathlib import Path
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.errors import RecipeError, WorkError, nearest
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["Measure", "installed_measures", "with_measures"]

GROUP: Final = "meseta.measures"
Function = Callable[[npt.NDArray[np.float32], npt.NDArray[np.float64]], float]


@dataclass(frozen=True)
class Measure:
    """One installed measure: its name, and what tells this version of it from any other."""

    name: str
    package: str
    version: str
    sha256: str


def installed_measures() -> dict[str, tuple[Measure, Function]]:
    """Return every installed measure by name; nothing of it is run."""
    found = {}
    for point in entry_points(group=GROUP):
        function: Function = point.load()
        package = point.dist.name if point.dist is not None else ""
        version = point.dist.version if point.dist is not None else ""
        found[point.name] = (Measure(point.name, package, version, _source_hash(function)), function)
    return found


def _source_hash(function: Function) -> str:
    """Return a hash of the file that holds the function, so that any edit shows."""
    source = inspect.getsourcefile(inspect.unwrap(function))
    return hashlib.sha256(Path(source).read_bytes()).hexdigest() if source else ""


def with_measures(traces: TraceSet, names: Sequence[str], work: Work) -> TraceSet:
    """Return the traces with one more column of the trace table for each named measure.

    Parameters
    ----------
    traces : TraceSet
    names : sequence of str
        Names of installed measures.
    work : Work

    Returns
    -------
    TraceSet
        Columns are float64; ``notes["measures"]`` says which versions made them, and the key depends on these.
        Columns that the traces have already by the same version, or by one that is not installed here, stay.

    Raises
    ------
    RecipeError
        Where no such measure is installed, or its name is taken by a column.
    WorkError
        Where a measure fails, naming it and the trace.
    """
    if not names:
        return traces
    installed = installed_measures()
    there = {str(one["name"]): one for one in traces.notes.get("measures", ())}
    names = [name for name in names if not _is_there(name, there, installed)]
    for name in names:
        if name not in installed:
            remedy = nearest(name, installed) or "install the package that has it"
            raise RecipeError(f"no measure '{name}' is installed", "selection.measures", remedy)
        if name in traces.table and name not in there:
            raise RecipeError(f"the traces have a column '{name}' already", "selection.measures", "rename the measure")
    if not names:
        return traces
    there = {name: one for name, one in there.items() if name not in names}
    chosen = [installed[name] for name in names]
    columns = {measure.name: _measured(traces, measure, function, work) for measure, function in chosen}
    said = [*there.values(), *(asdict(measure) for measure, _ in chosen)]
    return replace(
        traces,
        table={**traces.table, **columns},
        notes={**traces.notes, "measures": said},
        key=hashlib.sha256(f"{traces.key}\n{said}".encode()).hexdigest(),
    )


def _is_there(
    name: str, there: Mapping[str, Mapping[str, str]], installed: Mapping[str, tuple[Measure, Function]]
) -> bool:
    """Return whether a column of an earlier time can stay: by the same version, or one that is not installed here."""
    return name in there and (name not in installed or asdict(installed[name][0]) == dict(there[name]))


def _measured(traces: TraceSet, measure: Measure, function: Function, work: Work) -> npt.NDArray[np.float64]:
    spans = traces.blocks(work)
    source = traces.only("conductance")

    def block(span: tuple[int, int]) -> npt.NDArray[np.float64]:
        part = source.block(*span)
        return np.array([_one(part, row, span[0], measure, function) for row in range(part.traces)])

    sizes = [last - first for first, last in spans]
    parts = list(work.each(block, spans, f"measuring {measure.name}", sizes=sizes))
    return np.concatenate(parts) if parts else np.empty(0)


def _one(part: TraceSet, row: int, first: int, measure: Measure, function: Function) -> float:
    conductance, drive = part.trace_conductance(row), part.trace_drive(row)
    conductance.flags.writeable = drive.flags.writeable = False
    try:
        return float(function(conductance, drive))
    except Exception as error:  # it is the user's own code; what it raises is theirs to hear of
        raise WorkError(
            f"failed on trace {first + row} ({type(error).__name__}: {error})",
            f"measure '{measure.name}' of {measure.package} {measure.version}",
            "mend the measure, or leave it out of selection.measures",
        ) from error

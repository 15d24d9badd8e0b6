"""CSV recordings: one file a trace, wide, long; a continuous recording as one table of volts."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError, nearest
from meseta.simulate.results import RawSimulation, Simulation
from meseta.simulate.settings import SimulationSettings
from meseta.simulate.write_hdf5 import calibration_entries

__all__ = ["CSV_LAYOUTS", "write_raw_csv", "write_traces_csv"]


def _write(path: Path, header: Mapping[str, Any], columns: Mapping[str, npt.NDArray[Any]], delimiter: str) -> None:
    """Write "# name: value" lines, a row of headings, and the columns."""
    import pyarrow as pa
    from pyarrow import csv

    with path.open("wb") as file:
        for name, value in header.items():
            file.write(f"# {name}: {value}\n".encode())
        options = csv.WriteOptions(delimiter=delimiter, quoting_style="needed")
        csv.write_csv(pa.table(dict(columns)), file, options)


def _delimiter(path: Path) -> str:
    return "\t" if path.suffix.lower() == ".tsv" else ","


def write_raw_csv(
    simulation: RawSimulation, path: Path, settings: SimulationSettings, notes: Mapping[str, str]
) -> None:
    """Write a continuous recording as one table: time and volts of every channel."""
    samples = len(simulation.channels[0].values)
    columns = {"time_s": np.round(np.arange(samples) / settings.sampling_hertz, 9)}
    columns |= {f"{channel.name}_V": np.round(channel.volts(), 7) for channel in simulation.channels}
    _write(path, calibration_entries(settings, raw=True) | dict(notes), columns, _delimiter(path))


def write_traces_csv(
    simulation: Simulation, path: Path, settings: SimulationSettings, notes: Mapping[str, str], layout: str
) -> None:
    """Write cut traces in one of :data:`CSV_LAYOUTS`; for "files" the path is a folder that exists.

    Raises
    ------
    CallError
        Where there is no such layout.
    """
    if layout not in CSV_LAYOUTS:
        raise CallError(f"there is no CSV layout '{layout}'", "layout", nearest(layout, CSV_LAYOUTS))
    CSV_LAYOUTS[layout](simulation, path, calibration_entries(settings, raw=False) | dict(notes))


def _files(simulation: Simulation, path: Path, header: Mapping[str, Any]) -> None:
    traces = simulation.traces
    digits = max(3, len(str(traces.traces)))
    for trace in range(traces.traces):
        own = {"specimen": str(traces.table["specimen"][trace])} if traces.table["specimen"][trace] else {}
        columns: dict[str, npt.NDArray[Any]] = {
            "displacement_nm": np.round(traces.trace_drive(trace), 9),
            "conductance_G0": traces.trace_conductance(trace),
        }
        _write(path / f"trace_{trace + 1:0{digits}d}.csv", {**header, **own}, columns, ",")


def _wide(simulation: Simulation, path: Path, header: Mapping[str, Any]) -> None:
    traces = simulation.traces
    columns: dict[str, npt.NDArray[Any]] = {"displacement_nm": np.round(traces.trace_drive(0), 9)}
    columns |= {f"trace_{t + 1}_conductance_G0": traces.trace_conductance(t) for t in range(traces.traces)}
    _write(path, header, columns, _delimiter(path))


def _long(simulation: Simulation, path: Path, header: Mapping[str, Any]) -> None:
    traces = simulation.traces
    columns: dict[str, npt.NDArray[Any]] = {
        "trace": np.repeat(np.arange(traces.traces), traces.lengths),
        "displacement_nm": np.round(traces.drive_values(0, traces.traces), 9),
        "conductance_G0": traces.conductance,
    }
    _write(path, header, columns, _delimiter(path))


CSV_LAYOUTS: Final[Mapping[str, Callable[[Simulation, Path, Mapping[str, Any]], None]]] = {
    "files": _files,
    "wide": _wide,
    "long": _long,
}

"""HDF5 files that describe themselves: names, units, gain, bias, displacement a volt, sampling rate, direction."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np

from meseta.errors import CallError, nearest
from meseta.simulate.results import RawSimulation, Simulation
from meseta.simulate.settings import SimulationSettings

__all__ = ["HDF5_LAYOUTS", "calibration_entries", "write_raw_hdf5", "write_traces_hdf5"]

_PACKED: Final[dict[str, Any]] = {"compression": "gzip", "compression_opts": 6, "shuffle": True}


def calibration_entries(settings: SimulationSettings, *, raw: bool) -> dict[str, str | float]:
    """Return what a recording says of its set-up, by the names of the recipe's calibration settings."""
    entries: dict[str, str | float] = {
        "bias_volt": settings.bias_volt,
        "sampling_hertz": settings.sampling_hertz,
        "nm_per_second": settings.nm_per_second,
        "temperature_kelvin": settings.temperature_kelvin,
    }
    if not raw:
        return entries | {"direction": "opening"}
    entries |= {
        "amplifier": settings.amplifier,
        "offset_volt": settings.offset_volt,
        "full_scale_volt": settings.full_scale_volt,
        "series_resistance_ohm": settings.series_resistance_ohm,
        "nm_per_volt": settings.nm_per_volt,
        "pull_is": settings.pull_is,
    }
    if settings.amplifier == "logarithmic":
        return entries | {
            "volt_per_decade": settings.volt_per_decade,
            "reference_ampere": settings.reference_ampere,
        }
    entries["gain_volt_per_ampere"] = settings.gain_volt_per_ampere
    if settings.high_gain_volt_per_ampere is not None:
        entries["high_gain_volt_per_ampere"] = settings.high_gain_volt_per_ampere
        entries["high_gain_offset_volt"] = settings.offset_volt
    return entries


def write_raw_hdf5(
    simulation: RawSimulation, path: Path, settings: SimulationSettings, notes: Mapping[str, str]
) -> None:
    """Write a continuous recording: one integer dataset a channel (volts = stored * scale + offset)."""
    with h5py.File(path, "w") as file:
        file.attrs.update(calibration_entries(settings, raw=True) | dict(notes))
        for channel in simulation.channels:
            dataset = file.create_dataset(channel.name, data=channel.values, chunks=True, **_PACKED)
            dataset.attrs.update(
                {"role": channel.role, "unit": channel.unit, "scale": channel.scale, "offset": channel.offset}
            )


def write_traces_hdf5(
    simulation: Simulation, path: Path, settings: SimulationSettings, notes: Mapping[str, str], layout: str
) -> None:
    """Write cut traces in one of :data:`HDF5_LAYOUTS`.

    Raises
    ------
    CallError
        Where there is no such layout.
    """
    if layout not in HDF5_LAYOUTS:
        raise CallError(f"there is no HDF5 layout '{layout}'", "layout", nearest(layout, HDF5_LAYOUTS))
    with h5py.File(path, "w") as file:
        file.attrs.update(calibration_entries(settings, raw=False) | dict(notes))
        HDF5_LAYOUTS[layout](file, simulation)


def _dataset(group: Any, name: str, values: Any, unit: str, role: str) -> None:
    dataset = group.create_dataset(name, data=values, chunks=True, **_PACKED)
    dataset.attrs.update({"unit": unit, "role": role})


def _rows(file: Any, simulation: Simulation) -> None:
    """Write one row a trace, one shared displacement axis."""
    traces = simulation.traces
    _dataset(file, "conductance", traces.conductance.reshape(traces.traces, -1), "G0", "conductance")
    _dataset(file, "displacement", np.round(traces.trace_drive(0), 9), "nm", "displacement")
    if np.any(traces.table["specimen"] != ""):
        file.create_dataset("specimen", data=traces.table["specimen"].astype(object), dtype=h5py.string_dtype())


def _groups(file: Any, simulation: Simulation) -> None:
    """Write one group a trace."""
    traces = simulation.traces
    for trace in range(traces.traces):
        group = file.create_group(f"trace_{trace + 1:06d}")
        _dataset(group, "conductance", traces.trace_conductance(trace), "G0", "conductance")
        _dataset(group, "displacement", np.round(traces.trace_drive(trace), 9).astype(np.float32), "nm", "displacement")
        group.attrs["time_second"] = traces.table["time_second"][trace]
        if traces.table["specimen"][trace]:
            group.attrs["specimen"] = str(traces.table["specimen"][trace])


def _flat(file: Any, simulation: Simulation) -> None:
    """Write all traces end to end with the samples at which they begin."""
    traces = simulation.traces
    _dataset(file, "conductance", traces.conductance, "G0", "conductance")
    _dataset(file, "displacement", traces.drive_values(0, traces.traces).astype(np.float32), "nm", "displacement")
    file.create_dataset("offsets", data=traces.offsets)


HDF5_LAYOUTS: Final[Mapping[str, Callable[[Any, Simulation], None]]] = {
    "rows": _rows,
    "groups": _groups,
    "flat": _flat,
}

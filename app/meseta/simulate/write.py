"""A simulation into files, whole or not at all, with its truth beside it."""

from __future__ import annotations

import json
import shutil
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from meseta.errors import CallError, OutputError
from meseta.simulate.generate import simulate
from meseta.simulate.raw import simulate_raw
from meseta.simulate.results import RawSimulation, Simulation
from meseta.simulate.settings import SimulationSettings
from meseta.simulate.write_csv import CSV_LAYOUTS, write_raw_csv, write_traces_csv
from meseta.simulate.write_hdf5 import HDF5_LAYOUTS, write_raw_hdf5, write_traces_hdf5
from meseta.tables import write_csv
from meseta.work import Work

__all__ = ["LAYOUTS", "WrittenSimulation", "write_simulation"]

_HDF5 = (".h5", ".hdf5", ".hdf")
_TABLE = (".csv", ".tsv", ".txt")
LAYOUTS = ("auto", *HDF5_LAYOUTS, *CSV_LAYOUTS)
"""How cut traces are laid out: rows, groups, flat in HDF5; wide, long in one table; files: a folder of tables."""


@dataclass(frozen=True)
class WrittenSimulation:
    """What was written.

    Attributes
    ----------
    path : Path
        The recording: a file, or a folder of files.
    layout : str
        "continuous", or one of :data:`LAYOUTS`.
    truth_path, parameters_path : Path or None
        Truth table and parameters.
    """

    path: Path
    layout: str
    truth_path: Path | None
    parameters_path: Path | None
    traces: int
    samples: int
    plateaus: int
    size_byte: int

    def sentence(self) -> str:
        """Return one line that says what was written."""
        beside = f"; truth in {self.truth_path} and {self.parameters_path}" if self.truth_path else ""
        return (
            f"{self.path}: {self.traces} openings, {self.samples} samples, {self.plateaus} true plateaus, "
            f"layout {self.layout}{beside}"
        )


def write_simulation(
    kind: str,
    traces: int,
    seed: int,
    out_path: Path,
    truth_path: Path | None = None,
    raw: bool = False,
    *,
    layout: str = "auto",
    settings: SimulationSettings | None = None,
    work: Work | None = None,
    notes: dict[str, str] | None = None,
) -> WrittenSimulation:
    """Simulate and write a recording and its truth.

    Parameters
    ----------
    kind, traces, seed, settings, work
        As for :func:`~meseta.simulate.generate.simulate`.
    out_path : Path
        ``.h5``/``.hdf5``, ``.csv``/``.tsv``, or a folder that is missing or empty (one CSV file a trace).
    truth_path : Path, optional
        CSV of the true plateaus; the parameters go beside it under the same name with ``.json``.
    raw : bool
        One continuous recording of piezo and amplifier volts instead of traces in G0.
    layout : str
        One of :data:`LAYOUTS`; "auto" is rows in HDF5, long in one table, files in a folder.
    notes : dict, optional
        Further metadata of the recording ("specimen", "session", ...).

    Raises
    ------
    CallError
        Where kind, number, layout or ending make no sense.
    OutputError
        Where a file cannot be written; nothing is left behind.
    """
    settings, work = settings or SimulationSettings(), work or Work()
    chosen = _layout_for(out_path, layout, raw)
    _check_places(out_path, truth_path, chosen)
    said = {"title": f"simulated {kind}, seed {seed}"} | (notes or {})
    simulation: Simulation | RawSimulation
    if raw:
        simulation = simulate_raw(kind, traces, seed, settings, work)
        samples = len(simulation.channels[0].values)
    else:
        simulation = simulate(kind, traces, seed, settings, work)
        samples = simulation.traces.samples
    work.check()

    def write(place: Path) -> None:
        hdf5 = out_path.suffix.lower() in _HDF5
        if isinstance(simulation, RawSimulation):
            (write_raw_hdf5 if hdf5 else write_raw_csv)(simulation, place, settings, said)
        else:
            (write_traces_hdf5 if hdf5 else write_traces_csv)(simulation, place, settings, said, chosen)

    parameters_path = truth_path.with_suffix(".json") if truth_path else None
    try:
        _whole(out_path, write, folder=chosen == "files")
        if truth_path and parameters_path:
            _whole(truth_path, lambda place: write_csv(place, simulation.truth.columns()))
            stated = dict(simulation.parameters) | {"recording": out_path.name, "labels": simulation.labels.tolist()}
            text = json.dumps(stated, indent=1, allow_nan=False)
            _whole(parameters_path, lambda place: _write_text(place, text))
    except OSError as error:
        raise OutputError(
            error.strerror or str(error), str(error.filename or out_path), "choose another place"
        ) from error
    size = sum(file.stat().st_size for file in _files_of(out_path))
    return WrittenSimulation(
        out_path, chosen, truth_path, parameters_path, traces, samples, len(simulation.truth), size
    )


def _layout_for(path: Path, layout: str, raw: bool) -> str:
    """Return the layout that fits the ending of the path."""
    ending = path.suffix.lower()
    if ending in _HDF5:
        allowed, default = tuple(HDF5_LAYOUTS), "rows"
    elif ending in _TABLE:
        allowed, default = ("long", "wide"), "long"
    elif not ending:
        allowed, default = ("files",), "files"
    else:
        raise CallError(f"'{ending}' is no ending that can be written", str(path), "use .h5, .csv, .tsv, or a folder")
    if raw:
        if not ending:
            raise CallError("a continuous recording is one file", str(path), "use the ending .h5, .csv or .tsv")
        return "continuous"
    if layout == "auto":
        return default
    if layout not in allowed:
        raise CallError(f"the layout '{layout}' does not go with this file", str(path), "use " + " or ".join(allowed))
    return layout


def _check_places(out_path: Path, truth_path: Path | None, layout: str) -> None:
    """Raise before any work where the places cannot be used."""
    for path in filter(None, (out_path, truth_path)):
        if not path.absolute().parent.is_dir():
            raise OutputError("there is no such folder", str(path.absolute().parent), "make it first")
        if path.is_dir() and (layout != "files" or path == truth_path):
            raise OutputError("this is a folder", str(path), "give the name of a file")
    if layout == "files" and out_path.exists() and (not out_path.is_dir() or any(out_path.iterdir())):
        raise OutputError("the folder is not empty", str(out_path), "choose an empty or new folder")
    if truth_path is not None:
        if truth_path.suffix.lower() != ".csv":
            raise CallError(f"'{truth_path.suffix}' cannot hold the truth", str(truth_path), "use the ending .csv")
        if truth_path.absolute() == out_path.absolute():
            raise CallError("recording and truth have the same name", str(truth_path), "choose two names")


def _whole(path: Path, write: Callable[[Path], None], *, folder: bool = False) -> None:
    """Write beside the place and move there when it is complete."""
    with tempfile.TemporaryDirectory(prefix=f".{path.name}-", dir=path.absolute().parent) as holder:
        part = Path(holder) / path.name
        if folder:
            part.mkdir()
        write(part)
        if folder and path.is_dir():
            path.rmdir()
        shutil.move(part, path) if folder else part.replace(path)


def _write_text(path: Path, text: str) -> None:
    path.write_text(text + "\n", encoding="utf-8")


def _files_of(path: Path) -> list[Path]:
    return sorted(path.iterdir()) if path.is_dir() else [path]

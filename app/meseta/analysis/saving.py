"""Results to files: CSV, HDF5 or numpy's own format, each with units and where it comes from."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from meseta.analysis.core import Analysis
from meseta.errors import OutputError
from meseta.histograms.content import Content, columns_of, content_of
from meseta.tables import write_csv

__all__ = ["provenance_of", "save_result", "save_results", "write_hdf5"]


def save_result(result: Any, path: str | Path, analysis: Analysis | None = None) -> None:
    """Write a histogram, map or comparison; the name's ending decides the form.

    Parameters
    ----------
    result : result of a step, Comparison or Difference
    path : str or Path
        ``.csv``: one row a bin; ``.npz``: the arrays; ``.h5`` or ``.hdf5``: the arrays with their units and axes as
        attributes.  An existing file is replaced after success.
    analysis : Analysis, optional
        Whose recordings and recipe are written beside the numbers (not in CSV, which has no room for them).

    Raises
    ------
    OutputError
        Where the ending is unknown or the file cannot be written.
    """
    target = Path(path)
    if target.suffix.lower() in (".h5", ".hdf5"):
        save_results({"result": result}, target, analysis)
        return
    provenance = {} if analysis is None else provenance_of(analysis)
    ending = target.suffix.lower()
    writers: dict[str, Callable[[Path], None]] = {
        ".csv": lambda partial: write_csv(partial, columns_of(result)),
        ".npz": lambda partial: _write_arrays(partial, content_of(result), provenance),
    }
    if ending not in writers:
        raise OutputError(f"ends in '{ending}'", str(target), "take one of .csv, .npz, .h5, .hdf5")
    _whole_file(target, writers[ending])


def save_results(results: Mapping[str, Any], path: str | Path, analysis: Analysis | None = None) -> None:
    """Write several results into one HDF5 file, a group each; see :func:`save_result`."""
    provenance = {} if analysis is None else provenance_of(analysis)
    contents = {name: content_of(result) for name, result in results.items()}
    _whole_file(Path(path), lambda partial: write_hdf5(partial, contents, provenance))


def provenance_of(analysis: Analysis) -> dict[str, str]:
    """Return what made an analysis, as text by name: version, recordings with their SHA-256, traces' key, recipe."""
    sources = [f"{source.sha256}  {source.name}" for source in analysis.traces.sources]
    return {
        "meseta_version": _version(),
        "recordings_sha256": "\n".join(sources),
        "traces_key": analysis.traces.key,
        "decisions_key": analysis.decisions.key(),
        "recipe_toml": analysis.recipe.text(),
    }


def _version() -> str:
    from importlib.metadata import PackageNotFoundError, version

    try:
        return version("meseta")
    except PackageNotFoundError:
        return "unknown"


def _whole_file(target: Path, write: Callable[[Path], None]) -> None:
    """Write a file beside its place and move it there after success."""
    try:
        handle, name = tempfile.mkstemp(prefix=f".{target.stem}-", suffix=target.suffix, dir=target.absolute().parent)
        os.close(handle)
        partial = Path(name)
        try:
            write(partial)
            partial.replace(target)
        except BaseException:
            partial.unlink(missing_ok=True)
            raise
    except OSError as error:
        raise OutputError(
            f"cannot be written ({error.strerror or error})", str(target), "choose another place"
        ) from error


def _write_arrays(path: Path, content: Content, provenance: Mapping[str, str]) -> None:
    units = {f"{name}_unit": np.array(one.unit) for name, one in content.quantities.items() if one.unit}
    plain = {name: np.array(value) for name, value in {**content.attributes, **provenance}.items()}
    arrays: dict[str, Any] = {**content.arrays(), **units, "kind": np.array(content.kind)}
    # an attribute may have the name of an array
    arrays |= {name: value for name, value in plain.items() if name not in arrays}
    np.savez_compressed(path, **arrays)


def write_hdf5(path: Path, contents: Mapping[str, Content], provenance: Mapping[str, str]) -> None:
    """Write results as plain HDF5: a group each, a dataset a quantity with attributes ``unit`` and ``along``.

    Attributes of a group are the result's kind, normalisation, traces and the like; those of the file are the
    provenance.
    """
    import h5py

    with h5py.File(path, "w") as file:
        file.attrs.update(provenance)
        for group_name, content in contents.items():
            group = file.create_group(group_name)
            group.attrs["kind"] = content.kind
            group.attrs.update(content.attributes)
            for name, one in content.quantities.items():
                options = {"compression": "gzip", "shuffle": True} if one.values.size > 1000 else {}
                dataset = group.create_dataset(name, data=one.values, **options)
                dataset.attrs["unit"] = one.unit
                dataset.attrs["along"] = list(one.along)
                for place, axis in enumerate(one.along):
                    dataset.dims[place].label = axis

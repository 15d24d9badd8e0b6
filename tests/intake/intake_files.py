"""Small recordings for the tests of calibration."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np

from meseta.recipe import Recipe

G0_SIEMENS = 7.748091729863649e-05  # CODATA 2022, 2e²/h


def record(folder: Path, **channels: tuple[np.ndarray, dict[str, object]]) -> Path:
    """Write channels with their attributes into one HDF5 file."""
    path = folder / "record.h5"
    with h5py.File(path, "w") as file:
        for name, (values, attributes) in channels.items():
            file.create_dataset(name, data=values).attrs.update(attributes)
    return path


def volts(values: object) -> tuple[np.ndarray, dict[str, object]]:
    """Return values as a channel in volts."""
    return np.asarray(values, float), {"unit": "V"}


def recipe(**calibration: object) -> Recipe:
    """Return a recipe with settings of the calibration, and no cutting."""
    return Recipe.build({"calibration": calibration, "cutting": {"method": "none"}})

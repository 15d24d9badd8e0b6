"""Tables: frozen dataclasses whose fields are columns, and the one way they are written as CSV."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import fields
from pathlib import Path
from typing import Any, Self

import numpy as np
import numpy.typing as npt

__all__ = ["Table", "write_csv"]


class Table:
    """Base of frozen dataclasses whose every field is a column: arrays of one length.

    Columns are read as attributes (``table.level_g0``) or by name (``table["level_g0"]``).
    """

    def columns(self) -> dict[str, npt.NDArray[Any]]:
        """Return all columns by name, in order."""
        return {field.name: getattr(self, field.name) for field in fields(self)}  # type: ignore[arg-type]

    def __getitem__(self, name: str) -> npt.NDArray[Any]:
        try:
            return self.columns()[name]
        except KeyError:
            raise KeyError(f"no column '{name}'; there are {', '.join(self.columns())}") from None

    def __len__(self) -> int:
        return len(next(iter(self.columns().values())))

    def take(self, rows: npt.ArrayLike) -> Self:
        """Return the chosen rows (indices or mask)."""
        index = np.asarray(rows)
        return type(self)(**{name: column[index] for name, column in self.columns().items()})

    @classmethod
    def concatenate(cls, parts: Sequence[Self]) -> Self:
        """Return the rows of several tables, one after the other."""
        names = [field.name for field in fields(cls)]  # type: ignore[arg-type]
        return cls(**{name: np.concatenate([getattr(part, name) for part in parts]) for name in names})


def write_csv(path: Path, columns: Mapping[str, npt.ArrayLike]) -> None:
    """Write columns as CSV: UTF-8, comma, point, shortest text that reads back to the same number, NaN empty."""
    import pyarrow as pa
    from pyarrow import csv

    arrays = {}
    for name, column in columns.items():
        values = np.asarray(column)
        if values.dtype.kind == "f":
            arrays[name] = pa.array(values, mask=np.isnan(values))
        elif values.dtype.kind in "UOT":
            arrays[name] = pa.array([str(value) for value in values], pa.string())
        else:
            arrays[name] = pa.array(values)
    csv.write_csv(pa.table(arrays), path, csv.WriteOptions(quoting_style="needed"))

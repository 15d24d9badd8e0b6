"""Reading HDF5 that may be damaged or hostile: only what the schema has, only from this file, only plain numbers.

Links to other files, virtual and external datasets, variable-length data, object references and filters that would
need a plug-in are refused by name.  Sizes are checked against what is stored before memory is asked for.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import h5py
import numpy as np
import numpy.typing as npt

from meseta.errors import StudyError

__all__ = ["dataset", "filters", "group", "names", "read_array", "read_attribute", "read_text", "reading"]

Value = TypeVar("Value")
_FILTERS = frozenset({h5py.h5z.FILTER_DEFLATE, h5py.h5z.FILTER_SHUFFLE, h5py.h5z.FILTER_FLETCHER32})
_MOST_DEFLATED = 1100  # deflate packs at most 1032 : 1


def reading(what: str, where: str, function: Callable[[], Value]) -> Value:
    """Return ``function()``; whatever HDF5 says of a damaged file becomes one statement that names the part."""
    try:
        return function()
    except StudyError:
        raise
    except (OSError, RuntimeError, ValueError, KeyError, TypeError, UnicodeDecodeError, OverflowError) as error:
        reason = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise StudyError(
            f"{what} is damaged ({reason[:120]})", where, "use the part that is whole, or a copy of the study"
        ) from error


def group(parent: h5py.Group, name: str) -> h5py.Group:
    """Return a group of this file."""
    found = _here(parent, name)
    if not isinstance(found, h5py.Group):
        raise ValueError(f"'{name}' is not a group")
    return found


def names(parent: h5py.Group) -> list[str]:
    """Return the names in a group, without following anything."""
    return sorted(parent)


def dataset(parent: h5py.Group, name: str) -> h5py.Dataset:
    """Return a dataset of this file, after making sure that reading it touches nothing else."""
    found = _here(parent, name)
    if not isinstance(found, h5py.Dataset):
        raise ValueError(f"'{name}' is not a dataset")
    if found.is_virtual or found.external:
        raise StudyError("takes its data from other files", f"{found.file.filename}:{found.name}", "not a Meseta study")
    if found.dtype.hasobject or found.dtype.fields or found.dtype.kind not in "iufbS":
        raise ValueError(f"'{name}' has a type that studies do not use")
    if set(filters(found)) - _FILTERS:
        raise ValueError(f"'{name}' needs a filter that studies do not use")
    stored = found.id.get_storage_size()
    if found.size * found.dtype.itemsize > _MOST_DEFLATED * stored + 1024:
        raise ValueError(f"'{name}' claims more than is stored")
    return found


def filters(found: h5py.Dataset) -> list[int]:
    """Return the codes of the filters that a dataset passes through."""
    plan = found.id.get_create_plist()
    return [plan.get_filter(number)[0] for number in range(plan.get_nfilters())]


def _here(parent: h5py.Group, name: str) -> Any:
    link = parent.get(name, getlink=True)
    if link is None:
        raise KeyError(f"'{name}' is missing")
    if not isinstance(link, h5py.HardLink):
        raise StudyError(f"'{name}' is a link", str(parent.file.filename), "a study contains no links")
    return parent[name]


def read_array(parent: h5py.Group, name: str) -> npt.NDArray[Any]:
    """Return a column: numbers, truths, or texts (fixed-length UTF-8)."""
    found = dataset(parent, name)
    values = np.asarray(found[()])
    return np.char.decode(values, "utf-8") if values.dtype.kind == "S" else values


def read_text(parent: h5py.Group, name: str) -> str:
    """Return a long text."""
    values = read_array(parent, name)
    if values.dtype.kind != "U" or values.shape != (1,):
        raise ValueError(f"'{name}' is not a text")
    return str(values[0])


def read_attribute(parent: h5py.Group | h5py.Dataset, name: str) -> Any:
    """Return an attribute: a plain number or a short text."""
    if name not in parent.attrs:
        raise KeyError(f"attribute '{name}' is missing")
    kind = parent.attrs.get_id(name).dtype
    if kind.hasobject and h5py.check_string_dtype(kind) is None:
        raise ValueError(f"attribute '{name}' has a type that studies do not use")
    value = parent.attrs[name]
    if isinstance(value, bytes):
        return value.decode("utf-8")
    if isinstance(value, np.ndarray) and value.shape:
        raise ValueError(f"attribute '{name}' is an array")
    return value.item() if isinstance(value, np.generic) else value

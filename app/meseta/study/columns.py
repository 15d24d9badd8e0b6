"""Writing what is small: columns, texts, attributes; compressed, each block with its own checksum."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

__all__ = ["json_text", "write_array", "write_attribute", "write_columns", "write_text"]

_ROWS = 16_384


def write_array(parent: h5py.Group, name: str, values: npt.ArrayLike, unit: str = "", chunk: int = 0) -> h5py.Dataset:
    """Write a column of numbers, truths or texts in checksummed chunks; replaces one of that name.

    A column that is to grow needs its ``chunk`` stated.
    """
    array = np.asarray(values)
    if array.dtype.kind in "UOTM":
        array = np.char.encode(array.astype(np.str_), "utf-8")
    if name in parent:
        del parent[name]
    if array.dtype.kind == "S":
        length = max(array.dtype.itemsize, 1)
        kind = h5py.string_dtype("utf-8", length)
        array = array.astype(kind)
    else:
        kind = array.dtype
    made = parent.create_dataset(
        name,
        shape=array.shape,
        dtype=kind,
        chunks=tuple(chunk or max(min(size, _ROWS), 1) for size in array.shape) or None,
        maxshape=tuple(None for _ in array.shape) or None,
        **({"compression": "gzip", "compression_opts": 4, "shuffle": True, "fletcher32": True} if array.ndim else {}),
    )
    if array.size:
        made[...] = array
    if unit:
        write_attribute(made, "unit", unit)
    return made


def write_attribute(item: h5py.Group | h5py.Dataset, name: str, value: str | int) -> None:
    """Write an attribute; a text at its fixed length, so that it lies within a block that HDF5 checksums."""
    if isinstance(value, str):
        body = value.encode()
        item.attrs.create(name, np.array(body, h5py.string_dtype("utf-8", max(len(body), 1))))
    else:
        item.attrs[name] = value


def write_columns(parent: h5py.Group, columns: Mapping[str, npt.ArrayLike]) -> None:
    """Write several columns into a group."""
    for name, values in columns.items():
        write_array(parent, name, values)


def write_text(parent: h5py.Group, name: str, text: str) -> None:
    """Write a long text as one fixed-length string."""
    write_array(parent, name, np.array([text]))


def json_text(value: Any) -> str:
    """Return plain values as JSON, numpy's among them."""
    return json.dumps(value, default=_plain, ensure_ascii=False)


def _plain(value: Any) -> Any:
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, Mapping):
        return dict(value)
    if isinstance(value, tuple | set | frozenset):
        return list(value)
    return str(value)

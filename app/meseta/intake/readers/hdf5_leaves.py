"""The channel-like parts of a file like HDF5: datasets, fields of compound ones, named columns."""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Final

import numpy as np

from meseta.intake.meaning.metadata import plain_value
from meseta.intake.readers.hdf5_samples import Layer, VectorSamples
from meseta.intake.readers.hdf5_tree import Node
from meseta.traces import Samples

__all__ = ["CUTS", "INDEXES", "STOPS", "Leaf", "leaves_of"]

CUTS: Final = {
    "offsets": "offsets offset trace_offsets starts start trace_starts trace_start boundaries bounds begin begins "
    "first_sample index_start record_start",
    "lengths": "lengths length trace_lengths trace_length counts n_samples samples sizes size npts trace_sizes "
    "trace_size trace_samples samples_per_trace points_per_trace n_points num_samples row_lengths row_sizes",
}
STOPS: Final = (
    "stops stop ends end trace_stops trace_stop trace_ends trace_end index_stop index_end record_stop last_sample "
    "finishes"
)
INDEXES: Final = "index indices bounds ranges spans segments limits trace_index trace_bounds trace_ranges"
_CUT_NAMES: Final = frozenset(" ".join((*CUTS.values(), STOPS, INDEXES)).split())
_COLUMN_NAMES: Final = ("columns", "channels", "names", "channel_names", "column_names", "fields", "labels")
_UNITS: Final = ("units", "unit")
MOST_COLUMNS: Final = 64


@dataclass(frozen=True)
class Leaf:
    """One channel-like thing of the file: a dataset, or a field of a compound one."""

    name: str
    parent: str
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    attributes: Mapping[str, Any]
    node: Node
    samples: Samples

    @cached_property
    def is_vector(self) -> bool:
        """Return whether it has one dimension (or others of size 1)."""
        return sum(n > 1 for n in self.shape) <= 1

    @cached_property
    def length(self) -> int:
        """Number of samples."""
        return math.prod(self.shape)

    @property
    def may_cut(self) -> bool:
        """Whether it is named like a list of where traces begin, or how long they are."""
        return self.name.lower() in _CUT_NAMES


def leaves_of(node: Node, told: Collection[str] = ()) -> Iterator[Leaf]:
    """Yield the channel-like parts of a dataset: itself, its fields, or its named columns.

    Parameters
    ----------
    node : Node
    told : collection of str
        Names in ``intake.channels`` of the recipe; "column 2" there makes columns of a 2D array without names channels.
    """
    if node.dtype.names is not None:
        yield from _fields(node)
        return
    names = _column_names(node) or _columns_told(node, told)
    if not names:
        yield Leaf(node.leaf, node.parent, node.shape, node.dtype, node.attributes, node, VectorSamples(node.dataset))
        return
    axis = max(place for place, n in enumerate(node.shape) if n == len(names))
    shape = tuple(n for place, n in enumerate(node.shape) if place != axis)
    shared = {key: value for key, value in node.attributes.items() if str(key).lower() not in (*_COLUMN_NAMES, *_UNITS)}
    for place, (name, unit) in enumerate(zip(names, _column_units(node, len(names)), strict=True)):
        attributes = shared | ({"unit": unit} if unit else {})
        layer = Layer(node.dataset, axis, place)
        part = Node(f"{node.path}/{name}", layer, shape, node.dtype, attributes)
        yield Leaf(name, node.path, shape, node.dtype, attributes, part, VectorSamples(layer))


def _fields(node: Node) -> Iterator[Leaf]:
    if len(node.shape) != 1:
        return
    for name in node.dtype.names or ():
        dtype = node.dtype[name]
        if dtype.kind in "biuf" and dtype.shape == ():
            samples = VectorSamples(node.dataset, name)
            yield Leaf(name, node.path, node.shape, dtype, _field_attributes(node, name), node, samples)


def _columns_told(node: Node, told: Collection[str]) -> list[str]:
    """Return "column 1", "column 2" ... where the recipe speaks of so many columns of a 2D array without names."""
    numbers = [int(name.rsplit(" ", 1)[-1]) for name in told if re.fullmatch(r"(column )?\d{1,3}", name)]
    if not numbers or len(node.shape) != 2 or not max(numbers) <= min(node.shape) <= MOST_COLUMNS:
        return []
    return [f"column {n + 1}" for n in range(min(node.shape))]


def _field_attributes(node: Node, name: str) -> dict[str, Any]:
    """Return the attributes that concern one field: "unit_current", "current_unit", "current.unit"."""
    found = {}
    for key, value in node.attributes.items():
        lowered = str(key).lower()
        for rest in (lowered.removeprefix(f"{name.lower()}_"), lowered.removesuffix(f"_{name.lower()}")):
            if rest != lowered:
                found[rest] = value
        if lowered.startswith(f"{name.lower()}."):
            found[lowered.partition(".")[2]] = value
    return found


def _column_names(node: Node) -> list[str]:
    """Return the names that an attribute gives to the places of one axis; nothing where none does."""
    if not 2 <= len(node.shape) <= 3:
        return []
    for key, value in node.attributes.items():
        if str(key).lower() in _COLUMN_NAMES:
            names = _words(value)
            if len(names) in node.shape and len(set(names)) == len(names) > 1:
                return names
    return []


def _column_units(node: Node, count: int) -> list[str]:
    for key, value in node.attributes.items():
        if str(key).lower() in _UNITS:
            words = _words(value)
            if len(words) == count:
                return words
            if len(words) == 1:
                return words * count
    return [""] * count


def _words(value: Any) -> list[str]:
    """Return the words of a list, or of one text with commas between them."""
    array = np.asarray(value)
    words = array.reshape(-1).tolist() if array.size > 1 else re.split(r"[,;|\t]", str(plain_value(value) or ""))
    return [word.decode("utf-8", "replace") if isinstance(word, bytes) else str(word).strip() for word in words]

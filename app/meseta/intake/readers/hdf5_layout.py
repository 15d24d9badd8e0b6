"""How traces stand in an HDF5 file: rows or columns of a 2D array, flat with offsets, one dataset or group a trace."""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any, Final

import numpy as np
import numpy.typing as npt
from natsort import natsorted

from meseta.intake.metadata import plain_value
from meseta.intake.readers.hdf5_ragged import Ragged
from meseta.intake.readers.hdf5_samples import Layer, PartSamples, VectorSamples, columns_of, rows_of
from meseta.intake.readers.hdf5_tree import Node
from meseta.intake.readers.orientation import orientation
from meseta.intake.roles import DRIVE_ROLES, SIGNAL_ROLES, guess_role, stem_of
from meseta.traces import Samples

__all__ = ["Leaf", "Sheet", "leaves_of", "numbered_sheet", "sheet_of"]

_CUTS: Final = {
    "offsets": "offsets offset trace_offsets starts start trace_starts trace_start boundaries bounds begin begins "
    "first_sample index_start record_start",
    "lengths": "lengths length trace_lengths counts n_samples samples sizes size npts",
}
_CUT_NAMES: Final = frozenset(" ".join(_CUTS.values()).split())
_COLUMN_NAMES: Final = ("columns", "channels", "names", "channel_names", "column_names", "fields", "labels")
_UNITS: Final = ("units", "unit")
MOST_COLUMNS: Final = 64
CORNER: Final = (256, 4096)
"""Traces and samples that are looked at to tell rows from columns."""
_CHANNEL_STEMS: Final = frozenset(
    {
        "ch",
        "chan",
        "channel",
        "channels",
        "ai",
        "adc",
        "input",
        "col",
        "column",
        "analog",
        "var",
        "signal",
        "amp",
        "gain",
    }
)


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


@dataclass(frozen=True)
class Sheet:
    """Channels cut into pieces in one way.

    Attributes
    ----------
    channels : list of (name, samples, dtype, attributes, shared, context)
    offsets : (pieces + 1,) int64
    names : list of str
        Dataset path of each piece.
    starts : (pieces,) int64
        First sample of each piece in its dataset.
    table : mapping of str to (pieces,) array
    """

    layout: str
    channels: list[tuple[str, Samples, np.dtype[Any], Mapping[str, Any], bool, str]]
    offsets: npt.NDArray[np.int64]
    names: list[str]
    starts: npt.NDArray[np.int64]
    table: dict[str, npt.NDArray[Any]] = field(default_factory=dict)
    doubts: tuple[str, ...] = ()
    pieces_of: tuple[int, ...] = ()
    """Pieces of each group, where several groups stand one after the other."""


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


# -- numbered datasets: one dataset a trace ---------------------------------------------------------------------------


def numbered_sheet(parent: str, leaves: Sequence[Leaf]) -> Sheet | None:
    """Return the sheet of a group whose datasets are numbered traces; None where they are not.

    Several numbered sets ("G_001", "z_001") are channels of the same traces where their numbers agree.
    """
    sets: dict[str, dict[str, Leaf]] = {}
    for leaf in leaves:
        if leaf.is_vector and leaf.length > 1:
            stem = "" if leaf.name.isdigit() else stem_of(leaf.name)
            sets.setdefault(stem, {})[leaf.name] = leaf
    chosen = {stem: found for stem, found in sets.items() if _are_traces(stem, found)}
    if not chosen:
        return None
    context = parent.rpartition("/")[2]
    columns = {_best_name(stem, context): [found[name] for name in natsorted(found)] for stem, found in chosen.items()}
    return joined_leaves("one dataset a trace", columns, context)


def _best_name(stem: str, context: str) -> str:
    """Return what says more of numbered datasets: their own name, or that of the group they lie in."""
    if not stem or (guess_role(context).role in SIGNAL_ROLES and guess_role(stem).role not in SIGNAL_ROLES):
        return context
    return stem


def _are_traces(stem: str, found: Mapping[str, Leaf]) -> bool:
    if len(found) < 2 or stem in _CHANNEL_STEMS:
        return False
    if not stem:
        return True
    numbers = [name for name in found if name[-1:].isdigit() or name.endswith(")")]
    exact = {guess_role(name).role for name in found}
    return len(numbers) == len(found) and not (len(exact) == len(found) > 1)


def joined_leaves(layout: str, columns: Mapping[str, Sequence[Leaf]], context: str) -> Sheet | None:
    """Return a sheet whose pieces are datasets: column name -> one leaf a piece."""
    count = max(len(leaves) for leaves in columns.values())
    main = next(leaves for leaves in columns.values() if len(leaves) == count)
    lengths = np.array([leaf.length for leaf in main], np.int64)
    doubts, channels = [], []
    offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
    for name, leaves in columns.items():
        if len(leaves) != count or [leaf.length for leaf in leaves] != lengths.tolist():
            doubts.append(f"'{name}' does not go with the other datasets and was left out")
            continue
        samples, attributes = _parts(leaves, offsets)
        channels.append((name, samples, leaves[0].dtype, attributes, False, context))
    table = _differing([leaf.attributes for leaf in main])
    names = [f"{leaf.parent}/{leaf.name}" for leaf in main]
    return Sheet(layout, channels, offsets, names, np.zeros(count, np.int64), table, tuple(doubts))


@dataclass(frozen=True)
class _Converted:
    """A part whose own scale and offset differ from its neighbours'."""

    part: Samples
    scale: float
    offset: float

    def __len__(self) -> int:
        return len(self.part)

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        return self.part.read(start, stop).astype(np.float64) * self.scale + self.offset


def _parts(leaves: Sequence[Leaf], offsets: npt.NDArray[np.int64]) -> tuple[Samples, Mapping[str, Any]]:
    """Return samples of several datasets end to end, and the attributes that hold for all of them."""
    from meseta.intake.readers.contents import conversion, conversion_names

    if len(leaves) == 1:
        return leaves[0].samples, leaves[0].attributes
    conversions = [conversion(leaf.attributes, leaf.dtype.kind in "iu") for leaf in leaves]
    attributes = dict(leaves[0].attributes)
    parts: list[Samples] = [leaf.samples for leaf in leaves]
    if len(set(conversions)) > 1:
        parts = [_Converted(part, *one) for part, one in zip(parts, conversions, strict=True)]
        attributes = {key: value for key, value in attributes.items() if str(key).lower() not in conversion_names()}
    return PartSamples(tuple(parts), offsets), attributes


def _differing(rows: Sequence[Mapping[str, Any]]) -> dict[str, npt.NDArray[Any]]:
    """Return the attributes that differ from piece to piece, as columns under their own names."""
    from meseta.intake.readers.contents import columns_of, conversion_names

    if not any(rows):
        return {}
    plain = [{str(k): v for k, raw in row.items() if (v := plain_value(raw)) is not None} for row in rows]
    skipped = conversion_names() | {"unit", "units", "role"}
    columns = columns_of([{k: v for k, v in row.items() if k.lower() not in skipped} for row in plain])
    return {name: column for name, column in columns.items() if len(np.unique(column)) > 1}


# -- one group --------------------------------------------------------------------------------------------------------


def sheet_of(parent: str, leaves: Sequence[Leaf], layout: str, elsewhere: Sequence[Leaf] = ()) -> Sheet | None:
    """Return the sheet of the datasets of one group that are not numbered traces; None where nothing is understood.

    Parameters
    ----------
    parent : str
    leaves : sequence of Leaf
        The datasets of the group.
    layout : str
        ``intake.layout`` of the recipe.
    elsewhere : sequence of Leaf
        Datasets of any group that are named like what says where traces begin.
    """
    matrices = [leaf for leaf in leaves if len(leaf.shape) == 2 and not leaf.is_vector]
    vectors = [leaf for leaf in leaves if leaf.is_vector and leaf.length > 1]
    ragged = [leaf for leaf in leaves if isinstance(leaf.node.dataset, Ragged)]
    if ragged:
        return _ragged_rows(ragged, [leaf for leaf in vectors if leaf not in ragged])
    if matrices:
        return _matrix(matrices, vectors, layout)
    if not vectors:
        return None
    cut = _cut_points(vectors) or _cut_points(vectors, elsewhere)
    return _ragged(vectors, *cut) if cut else _record(parent, vectors)


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


def _matrix(matrices: Sequence[Leaf], vectors: Sequence[Leaf], layout: str) -> Sheet:
    main = max(matrices, key=lambda leaf: (_is_signal(leaf), leaf.length))
    rows, doubt = _rows_are_traces(main, vectors, layout)
    pieces, n = main.shape if rows else main.shape[::-1]
    doubts = [doubt] if doubt else []
    channels: list[tuple[str, Samples, np.dtype[Any], Mapping[str, Any], bool, str]] = []
    for leaf in matrices:
        if leaf.shape == main.shape:
            samples = rows_of(leaf.node.dataset) if rows else columns_of(leaf.node.dataset)
            context = leaf.parent.rpartition("/")[2]
            channels.append((leaf.name, samples, leaf.dtype, leaf.attributes, False, context))
        else:
            doubts.append(f"'{leaf.name}' has another shape than '{main.name}' and was left out")
    table = {}
    for leaf in vectors:
        if leaf.length == n and (n != pieces or guess_role(leaf.name).role in DRIVE_ROLES):
            channels.append((leaf.name, leaf.samples, leaf.dtype, leaf.attributes, True, ""))
        elif leaf.length == pieces:
            table[leaf.name] = np.asarray(leaf.samples.read(0, pieces))
        else:
            doubts.append(f"'{leaf.name}' goes with neither traces nor samples and was left out")
    offsets = np.arange(pieces + 1, dtype=np.int64) * n
    way = "rows" if rows else "columns"
    names, starts = [main.node.path] * pieces, offsets[:-1].copy()
    return Sheet(f"2D dataset, traces in {way}", channels, offsets, names, starts, table, tuple(doubts))


def _is_signal(leaf: Leaf) -> bool:
    unit = str(plain_value(leaf.attributes.get("unit", leaf.attributes.get("units", ""))) or "")
    try:
        return guess_role(leaf.name, unit).role in (
            "conductance",
            "log_conductance",
            "current",
            "amplifier",
            "resistance",
        )
    except Exception:  # noqa: BLE001  an unknown unit is reported where the channel is made
        return False


def _rows_are_traces(leaf: Leaf, vectors: Sequence[Leaf], layout: str) -> tuple[bool, str]:
    """Return whether each row is a trace, and a doubt: told, by a fitting axis, else by what the numbers look like."""
    if layout in ("rows", "columns"):
        return layout == "rows", ""
    fits = {leaf.shape.index(v.length) for v in vectors if v.length in leaf.shape and leaf.shape[0] != leaf.shape[1]
            and guess_role(v.name).role in DRIVE_ROLES}  # fmt: skip
    if len(fits) == 1:
        return fits == {1}, ""
    found = orientation(leaf.node.dataset[: CORNER[0], : CORNER[1]], leaf.node.dataset[: CORNER[1], : CORNER[0]])
    if found.sure:
        return found.rows, ""
    word = "rows" if found.rows else "columns"
    return found.rows, (
        f"'{leaf.name}': it is not clear whether traces are its rows or its columns; {word} taken (set intake.layout)"
    )


def _ragged_rows(ragged: Sequence[Leaf], vectors: Sequence[Leaf]) -> Sheet:
    """Return the sheet of datasets whose elements are rows of different length."""
    main = max(ragged, key=lambda leaf: (_is_signal(leaf), leaf.length))
    offsets = main.node.dataset.offsets
    alike = [leaf for leaf in ragged if np.array_equal(leaf.node.dataset.offsets, offsets)]
    doubts = [f"'{leaf.name}' has rows of other lengths and was left out" for leaf in ragged if leaf not in alike]
    channels = [
        (leaf.name, leaf.samples, leaf.dtype, leaf.attributes, False, leaf.parent.rpartition("/")[2]) for leaf in alike
    ]
    pieces = len(offsets) - 1
    table = {leaf.name: np.asarray(leaf.samples.read(0, pieces)) for leaf in vectors if leaf.length == pieces}
    names, starts = [main.node.path] * pieces, offsets[:-1].copy()
    return Sheet("rows of different length", channels, offsets, names, starts, table, tuple(doubts))


def _cut_points(
    vectors: Sequence[Leaf], candidates: Sequence[Leaf] | None = None
) -> tuple[Leaf, npt.NDArray[np.int64]] | None:
    """Return the dataset of offsets or lengths, and the offsets it means for the longest channel; None without one."""
    longest = max(leaf.length for leaf in vectors)
    for kind, names in _CUTS.items():
        for leaf in vectors if candidates is None else candidates:
            if leaf.name.lower() not in names.split() or leaf.length > 50_000_000:
                continue
            values = np.asarray(leaf.samples.read(0, leaf.length))
            if not np.all(np.isfinite(values)) or not np.all(values == np.round(values)):
                continue
            numbers = values.astype(np.int64)
            offsets = np.concatenate([[0], np.cumsum(numbers)]) if kind == "lengths" else numbers
            if kind == "offsets" and offsets[-1] < longest:
                offsets = np.concatenate([offsets, [longest]])
            if offsets[0] == 0 and offsets[-1] == longest and np.all(np.diff(offsets) >= 0):
                return leaf, offsets.astype(np.int64)
    return None


def _ragged(vectors: Sequence[Leaf], cut: Leaf, offsets: npt.NDArray[np.int64]) -> Sheet:
    pieces, doubts, channels, table = len(offsets) - 1, [], [], {}
    for leaf in vectors:
        if leaf is cut:
            continue
        if leaf.length == offsets[-1]:
            channels.append(
                (leaf.name, leaf.samples, leaf.dtype, leaf.attributes, False, leaf.parent.rpartition("/")[2])
            )
        elif leaf.length == pieces:
            table[leaf.name] = np.asarray(leaf.samples.read(0, pieces))
        elif not leaf.may_cut:
            doubts.append(f"'{leaf.name}' goes with neither traces nor samples and was left out")
    names = [f"{channels[0][0]}"] * pieces if channels else [""] * pieces
    layout = f"flat, cut by '{cut.name}'"
    return Sheet(layout, channels, offsets, names, offsets[:-1].copy(), table, tuple(doubts))


def _record(parent: str, vectors: Sequence[Leaf]) -> Sheet:
    """Return channels of equal length side by side: a continuous recording, or one trace."""
    sizes = [leaf.length for leaf in vectors]
    length = max(set(sizes), key=lambda size: (sizes.count(size) * size, size))
    context = parent.rpartition("/")[2]
    channels = [(v.name, v.samples, v.dtype, v.attributes, False, context) for v in vectors if v.length == length]
    doubts = tuple(
        f"'{v.name}' has {v.length} samples, not {length}, and was left out" for v in vectors if v.length != length
    )
    names = [parent or "/"]
    return Sheet(
        "channels side by side", channels, np.array([0, length], np.int64), names, np.zeros(1, np.int64), {}, doubts
    )


def joined_sheets(sheets: Sequence[Sheet], layout: str) -> Sheet:
    """Return the pieces of several groups with the same channels, one group after the other."""
    totals = np.concatenate([[0], np.cumsum([sheet.offsets[-1] for sheet in sheets])]).astype(np.int64)
    offsets = np.concatenate([[0], *(sheet.offsets[1:] + base for sheet, base in zip(sheets, totals, strict=False))])
    by_name = [{channel[0]: channel for channel in sheet.channels} for sheet in sheets]
    channels = []
    for name, _, dtype, attributes, shared, context in sheets[0].channels:
        if shared:
            channels.append(by_name[0][name])
            continue
        samples = PartSamples(tuple(group[name][1] for group in by_name), totals)
        channels.append((name, samples, dtype, attributes, False, context))
    names = [name for sheet in sheets for name in sheet.names]
    starts = np.concatenate([sheet.starts for sheet in sheets])
    doubts = tuple(dict.fromkeys(doubt for sheet in sheets for doubt in sheet.doubts))
    return replace(
        sheets[0], layout=layout, channels=channels, offsets=offsets.astype(np.int64), names=names, starts=starts,
        table=_joined_tables(sheets), doubts=doubts, pieces_of=tuple(len(sheet.names) for sheet in sheets),
    )  # fmt: skip


def _joined_tables(sheets: Sequence[Sheet]) -> dict[str, npt.NDArray[Any]]:
    names = set(sheets[0].table).intersection(*(sheet.table for sheet in sheets))
    return {name: np.concatenate([sheet.table[name] for sheet in sheets]) for name in sorted(names)}

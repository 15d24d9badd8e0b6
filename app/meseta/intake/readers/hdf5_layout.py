"""How traces stand in one group of a file like HDF5: rows or columns of a 2D array, flat with offsets, side by side."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.meaning.metadata import plain_value
from meseta.intake.meaning.roles import DRIVE_ROLES, guess_role
from meseta.intake.readers.hdf5_leaves import CUTS, INDEXES, STOPS, Leaf
from meseta.intake.readers.hdf5_ragged import Ragged
from meseta.intake.readers.hdf5_samples import columns_of, rows_of
from meseta.intake.readers.hdf5_sheets import Sheet
from meseta.intake.readers.hdf5_spans import Spans, spans_of
from meseta.intake.readers.orientation import orientation
from meseta.intake.recording import BETWEEN_TRACES
from meseta.traces import Samples

__all__ = ["sheet_of"]

FEW_CHANNELS: Final = 8
"""So few rows or columns may be channels as well."""
LARGEST_INDEX: Final = 50_000_000
CORNER: Final = (256, 4096)
"""Traces and samples that are looked at to tell rows from columns."""


def _indexed(matrices: Sequence[Leaf], vectors: Sequence[Leaf], candidates: Sequence[Leaf]) -> Sheet | None:
    """Return channels cut by an index of starts and stops, which may leave samples to no trace; None without one."""
    if any(not leaf.may_cut for leaf in matrices) or not vectors:
        return None
    longest = max(leaf.length for leaf in vectors)
    for words, starts, stops in _indexes(candidates):
        spans = spans_of(starts, stops, longest)
        if spans is not None:
            return _cut_by_index(vectors, words, spans, len(starts))
    return None


def _indexes(candidates: Sequence[Leaf]) -> Iterator[tuple[str, npt.NDArray[np.int64], npt.NDArray[np.int64]]]:
    """Yield the indexes among datasets, in words, with starts and stops: pairs in one dataset, or in two."""
    for leaf in candidates:
        if len(leaf.shape) == 2 and leaf.shape[1] == 2 and leaf.name.lower() in INDEXES.split():
            numbers = _whole_numbers(leaf, np.asarray(leaf.node.dataset[:]) if leaf.length <= LARGEST_INDEX else None)
            if numbers is not None:
                yield f"'{leaf.name}'", numbers[:, 0], numbers[:, 1]
    for first, starts in _listed(candidates, CUTS["offsets"]):
        for second, stops in _listed(candidates, STOPS):
            yield f"'{first.name}' and '{second.name}'", starts, stops
        for second, lengths in _listed(candidates, CUTS["lengths"]):
            if len(lengths) == len(starts):
                yield f"'{first.name}' and '{second.name}'", starts, starts + lengths


def _listed(candidates: Sequence[Leaf], names: str) -> Iterator[tuple[Leaf, npt.NDArray[np.int64]]]:
    for leaf in candidates:
        if leaf.is_vector and leaf.name.lower() in names.split() and leaf.length <= LARGEST_INDEX:
            numbers = _whole_numbers(leaf, np.asarray(leaf.samples.read(0, leaf.length)))
            if numbers is not None:
                yield leaf, numbers


def _whole_numbers(leaf: Leaf, values: npt.NDArray[Any] | None) -> npt.NDArray[np.int64] | None:
    if values is None or leaf.dtype.kind not in "iuf":
        return None
    is_whole = np.all(np.isfinite(values)) and np.all(values == np.round(values))
    return values.astype(np.int64) if is_whole else None


def _cut_by_index(vectors: Sequence[Leaf], words: str, spans: Spans, count: int) -> Sheet:
    total, doubts = int(spans.offsets[-1]), list(spans.words(words))
    channels = []
    table: dict[str, npt.NDArray[Any]] = {}
    for leaf in vectors:
        if leaf.length == total:
            context = leaf.parent.rpartition("/")[2]
            channels.append((leaf.name, leaf.samples, leaf.dtype, leaf.attributes, False, context))
        elif leaf.length == count and not leaf.may_cut:
            table[leaf.name] = spans.of_each(np.asarray(leaf.samples.read(0, count)))
        elif not leaf.may_cut:
            doubts.append(f"'{leaf.name}' goes with neither traces nor samples and was left out")
    if spans.between.any():
        table[BETWEEN_TRACES] = spans.between
    pieces = len(spans.between)
    layout = f"flat, cut by {words}"
    return Sheet(
        layout, channels, spans.offsets, [channels[0][0]] * pieces, spans.offsets[:-1].copy(), table, tuple(doubts)
    )


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
    indexed = _indexed(matrices, vectors, leaves) or _indexed(matrices, vectors, elsewhere)
    if indexed is not None:
        return indexed
    ragged = [leaf for leaf in leaves if isinstance(leaf.node.dataset, Ragged)]
    if ragged:
        return _ragged_rows(ragged, [leaf for leaf in vectors if leaf not in ragged])
    if matrices:
        return _matrix(matrices, vectors, layout)
    if not vectors:
        return None
    cut = _cut_points(vectors) or _cut_points(vectors, elsewhere)
    return _ragged(vectors, *cut) if cut else _record(parent, vectors)


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
        few = min(leaf.shape) == leaf.shape[0 if found.rows else 1] <= FEW_CHANNELS and not _is_signal(leaf)
        said = f"'{leaf.name}': its {min(leaf.shape)} {'rows' if found.rows else 'columns'} are taken for traces; "
        return found.rows, f"{said}{_as_channels(leaf)}" if few else ""
    word = "rows" if found.rows else "columns"
    count, length = leaf.shape if found.rows else leaf.shape[::-1]
    doubt = (
        f"'{leaf.name}', {leaf.shape[0]} x {leaf.shape[1]}: it is not clear whether traces are its rows or its "
        f"columns; {word} taken, {count} traces of {length} samples (set intake.layout to rows or columns)"
    )
    return found.rows, doubt if count > FEW_CHANNELS or _is_signal(leaf) else f"{doubt}; {_as_channels(leaf)}"


def _as_channels(leaf: Leaf) -> str:
    """Return how to say that the few rows or columns of an array are no traces but the channels of one."""
    role = '{role = "current", unit = "nA"}'
    return f"if these are {min(leaf.shape)} channels, say what each is: --set intake.channels.\"column 1\"='{role}' ..."


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
    for kind, names in CUTS.items():
        for leaf in vectors if candidates is None else candidates:
            if leaf.name.lower() not in names.split() or leaf.length > LARGEST_INDEX:
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

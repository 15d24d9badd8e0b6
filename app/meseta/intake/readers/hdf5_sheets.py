"""Channels cut into pieces in one way, from one dataset a piece or from several groups."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.intake.meaning.metadata import plain_value
from meseta.intake.readers.contents import columns_of, conversion, conversion_names
from meseta.intake.readers.hdf5_leaves import Leaf
from meseta.intake.readers.hdf5_samples import PartSamples
from meseta.intake.recording import BETWEEN_TRACES
from meseta.traces import Samples

__all__ = ["Sheet", "joined_leaves", "joined_sheets"]


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
    if not any(rows):
        return {}
    plain = [{str(k): v for k, raw in row.items() if (v := plain_value(raw)) is not None} for row in rows]
    skipped = conversion_names() | {"unit", "units", "role"}
    columns = columns_of([{k: v for k, v in row.items() if k.lower() not in skipped} for row in plain])
    return {name: column for name, column in columns.items() if len(np.unique(column)) > 1}


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
    joined = {name: np.concatenate([sheet.table[name] for sheet in sheets]) for name in sorted(names)}
    if any(BETWEEN_TRACES in sheet.table for sheet in sheets):
        none = [np.zeros(len(sheet.names), np.bool_) for sheet in sheets]
        parts = [sheet.table.get(BETWEEN_TRACES, of) for sheet, of in zip(sheets, none, strict=True)]
        joined[BETWEEN_TRACES] = np.concatenate(parts)
    return joined

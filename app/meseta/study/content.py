"""Traces and the list of recordings, read from the study file; see :mod:`meseta.study.growing` for writing."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import Any

import h5py
import numpy as np

from meseta.study.chunks import BlockFile, read_samples
from meseta.study.columns import write_array
from meseta.study.strict import group, names, read_array, read_attribute, read_text
from meseta.traces import Channel, Drive, PhaseTable, Source, TraceSet

__all__ = ["PHASES", "read_sources", "read_traces", "write_sources"]

PHASES = ("trace", "start", "stop", "kind")
_SOURCES = ("sha256", "name", "size_byte", "reader", "layout")
_NUMBERS = ("size_byte",)


def write_sources(root: h5py.Group, sources: Sequence[Source], kept: Sequence[str]) -> None:
    """Write ``/sources``; ``kept`` says of each whether its recording is "copied", "linked" or "none"."""
    if "sources" in root:
        del root["sources"]
    home = root.create_group("sources")
    for name in _SOURCES:
        values = [getattr(one, name) for one in sources]
        write_array(home, name, np.array(values, np.int64 if name in _NUMBERS else np.str_))
    write_array(home, "raw", np.array(list(kept), np.str_))


def read_sources(root: h5py.Group) -> tuple[tuple[Source, ...], tuple[str, ...]]:
    """Return the recordings that the traces come from, and how each is kept."""
    home = group(root, "sources")
    columns: dict[str, Any] = {name: read_array(home, name).tolist() for name in _SOURCES}
    sources = tuple(Source(**dict(zip(columns, row, strict=True))) for row in zip(*columns.values(), strict=True))
    kept = tuple(read_array(home, "raw").tolist())
    if len(kept) != len(sources) or set(kept) - {"copied", "linked", "none"}:
        raise ValueError("column 'raw' does not fit")
    return sources, kept


def read_traces(root: h5py.Group, file: BlockFile, sources: tuple[Source, ...]) -> tuple[TraceSet, str]:
    """Return the traces of a study and the key of the settings that made them.

    Samples are read from ``file`` when they are asked for.
    """
    home = group(root, "traces")
    unit = str(read_attribute(home, "drive_unit"))
    relative = read_samples(home, "drive_relative", file)[0] if "drive_relative" in home else None
    channels, phases, table = (group(home, name) for name in ("channels", "phases", "table"))
    traces = TraceSet(
        offsets=read_array(home, "offsets").astype(np.int64),
        channels={
            name: Channel(*read_samples(channels, name, file))
            for name in names(channels)
            if not name.endswith("_checksums")
        },
        drive=Drive(read_array(home, "drive_start"), read_array(home, "drive_step"), unit, relative),
        phases=PhaseTable(*(read_array(phases, name) for name in PHASES)),
        table={name: read_array(table, name) for name in _ordered(table)},
        sources=sources,
        key=str(read_attribute(home, "key")),
        quality=read_samples(home, "quality", file)[0] if "quality" in home else None,
        notes=json.loads(read_text(home, "notes")),
    )
    _check(traces)
    return traces, str(read_attribute(home, "recipe_key"))


def _ordered(table: h5py.Group) -> list[str]:
    """Return the names of a table's columns in their order; a study of schema 1 does not tell it."""
    order = json.loads(str(read_attribute(table, "order"))) if "order" in table.attrs else []
    there = names(table)
    return [name for name in order if name in there] + [name for name in there if name not in order]


def _check(traces: TraceSet) -> None:
    """Raise ValueError where the parts do not fit together, so that nothing later reads beyond an end."""
    count, samples = traces.traces, traces.samples
    rows = [traces.drive.start, traces.drive.step, *traces.table.values()]
    lengths = [len(channel.samples) for channel in traces.channels.values()]
    lengths += [len(one) for one in (traces.quality, traces.drive.relative) if one is not None]
    if traces.offsets.ndim != 1 or count < 0 or traces.offsets[0] != 0 or (np.diff(traces.offsets) < 0).any():
        raise ValueError("offsets do not rise from 0")
    if any(len(row) != count for row in rows) or any(length != samples for length in lengths):
        raise ValueError("columns or channels have the wrong length")
    phases = traces.phases
    inside = (phases.trace >= 0) & (phases.trace < count) & (phases.start >= 0) & (phases.start <= phases.stop)
    if not inside.all() or (phases.stop > traces.lengths[phases.trace]).any():
        raise ValueError("phases lie outside their traces")
    source = traces.table["source"]
    if "conductance" not in traces.channels or (count and not 0 <= source.min() <= source.max() < len(traces.sources)):
        raise ValueError("the conductance or a recording is missing")

"""A TraceSet in the study file: group ``/traces`` and table ``/sources``."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import Any

import h5py
import numpy as np

from meseta.study.chunks import BlockFile, read_samples, write_samples
from meseta.study.columns import json_text, write_array, write_columns, write_text
from meseta.study.strict import group, names, read_array, read_attribute, read_text
from meseta.traces import Channel, Drive, PhaseTable, Source, TraceSet
from meseta.work import Work

__all__ = ["read_sources", "read_traces", "write_sources", "write_traces"]

_PHASES = ("trace", "start", "stop", "kind")
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


def write_traces(root: h5py.Group, traces: TraceSet, recipe_key: str, work: Work) -> None:
    """Write ``/traces``, block by block; ``recipe_key`` says by which settings they were made."""
    home = root.create_group("traces")
    home.attrs["key"] = traces.key
    home.attrs["recipe_key"] = recipe_key
    home.attrs["drive_unit"] = traces.drive.unit
    write_array(home, "offsets", traces.offsets)
    write_array(home, "drive_start", traces.drive.start, traces.drive.unit)
    write_array(home, "drive_step", traces.drive.step, traces.drive.unit)
    write_text(home, "notes", json_text(traces.notes))
    write_columns(home.create_group("phases"), {name: getattr(traces.phases, name) for name in _PHASES})
    write_columns(home.create_group("table"), traces.table)
    _write_channels(home, traces, work)


def _write_channels(home: h5py.Group, traces: TraceSet, work: Work) -> None:
    relative, quality = traces.drive.relative, traces.quality
    total = traces.samples * (len(traces.channels) + (relative is not None) + (quality is not None))
    done = 0

    def wrote(samples: int) -> None:
        nonlocal done
        done += samples
        work.tell("writing the study", done, total, "samples")

    channels = home.create_group("channels")
    for name, channel in traces.channels.items():
        write_samples(channels, name, channel.samples, np.float32, channel.unit, wrote)
    if relative is not None:
        write_samples(home, "drive_relative", relative, np.float32, traces.drive.unit, wrote)
    if quality is not None:
        write_samples(home, "quality", quality, np.uint8, "", wrote)


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
        phases=PhaseTable(*(read_array(phases, name) for name in _PHASES)),
        table={name: read_array(table, name) for name in names(table)},
        sources=sources,
        key=str(read_attribute(home, "key")),
        quality=read_samples(home, "quality", file)[0] if "quality" in home else None,
        notes=json.loads(read_text(home, "notes")),
    )
    _check(traces)
    return traces, str(read_attribute(home, "recipe_key"))


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

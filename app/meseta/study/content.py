"""A TraceSet in the study file: group ``/traces`` and table ``/sources``."""

from __future__ import annotations

import json
from typing import Any

import h5py
import numpy as np

from meseta.study.chunks import BlockFile, read_samples, write_samples
from meseta.study.columns import json_text, write_array, write_columns, write_text
from meseta.study.strict import group, names, read_array, read_attribute, read_text
from meseta.traces import Channel, Drive, PhaseTable, Source, TraceSet
from meseta.work import Work

__all__ = ["read_traces", "write_traces"]

_PHASES = ("trace", "start", "stop", "kind")
_SOURCES = ("sha256", "name", "size_byte", "reader", "layout")


def write_traces(root: h5py.Group, traces: TraceSet, work: Work) -> None:
    """Write ``/sources`` and ``/traces``, block by block."""
    columns = {name: np.array([getattr(one, name) for one in traces.sources]) for name in _SOURCES}
    write_columns(root.create_group("sources"), columns)
    home = root.create_group("traces")
    home.attrs["key"] = traces.key
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
        write_samples(channels, name, channel.samples, np.float32, channel.unit, wrote=wrote)
    if relative is not None:
        write_samples(home, "drive_relative", relative, np.float32, traces.drive.unit, wrote=wrote)
    if quality is not None:
        write_samples(home, "quality", quality, np.uint8, wrote=wrote)


def read_traces(root: h5py.Group, file: BlockFile) -> TraceSet:
    """Return the traces of a study; their samples are read from ``file`` when they are asked for."""
    home = group(root, "traces")
    offsets = read_array(home, "offsets").astype(np.int64)
    unit = str(read_attribute(home, "drive_unit"))
    relative = read_samples(home, "drive_relative", file)[0] if "drive_relative" in home else None
    drive = Drive(read_array(home, "drive_start"), read_array(home, "drive_step"), unit, relative)
    channels = group(home, "channels")
    phases = group(home, "phases")
    table = group(home, "table")
    return TraceSet(
        offsets=offsets,
        channels={
            name: Channel(*read_samples(channels, name, file))
            for name in names(channels)
            if not name.endswith("_checksums")
        },
        drive=drive,
        phases=PhaseTable(*(read_array(phases, name) for name in _PHASES)),
        table={name: read_array(table, name) for name in names(table)},
        sources=read_sources(root),
        key=str(read_attribute(home, "key")),
        quality=read_samples(home, "quality", file)[0] if "quality" in home else None,
        notes=json.loads(read_text(home, "notes")),
    )


def read_sources(root: h5py.Group) -> tuple[Source, ...]:
    """Return the recordings that the traces come from."""
    home = group(root, "sources")
    columns: dict[str, Any] = {name: read_array(home, name).tolist() for name in _SOURCES}
    return tuple(Source(**dict(zip(columns, row, strict=True))) for row in zip(*columns.values(), strict=True))

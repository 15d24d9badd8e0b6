"""Writing traces into the study file, one set after the other, so that no more than one is in memory."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from meseta.errors import InputError, StudyError
from meseta.intake.rows import BLOCK_SAMPLES
from meseta.study.chunks import ChunkSamples, SampleRow
from meseta.study.columns import json_text, write_array, write_attribute, write_columns, write_text
from meseta.study.content import PHASES
from meseta.traces import PhaseTable, Samples, TraceSet
from meseta.work import Work

__all__ = ["TraceWriter"]

Table = Mapping[str, npt.NDArray[Any]]


@dataclass(frozen=True)
class _Constant:
    """Samples of one value (see :class:`meseta.traces.Samples`)."""

    value: float
    length: int

    def __len__(self) -> int:
        return self.length

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        return np.full(stop - start, self.value)


@dataclass(frozen=True)
class _Steps:
    """The drive of traces with equal steps, relative to each trace's start."""

    offsets: npt.NDArray[np.int64]
    step: npt.NDArray[np.float64]

    def __len__(self) -> int:
        return int(self.offsets[-1])

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        flat = np.arange(start, stop)
        trace = np.searchsorted(self.offsets, flat, side="right") - 1
        return ((flat - self.offsets[trace]) * self.step[trace]).astype(np.float32)


class TraceWriter:
    """Writes ``/traces``: :meth:`append` sets of traces, then :meth:`finish`.

    Parameters
    ----------
    root : h5py.Group
    work : Work
    expected : int
        Samples to come.
    present : TraceSet, optional
        The traces that ``/traces`` holds already and that the new ones follow.
    """

    def __init__(self, root: h5py.Group, work: Work, expected: int, present: TraceSet | None = None) -> None:
        self._work, self._expected, self._done = work, expected, 0
        self._rows: dict[str, SampleRow] = {}
        self._ends: TraceSet | None = None
        if present is None:
            self._home = root.create_group("traces")
            self._home.create_group("channels")
        else:
            self._home = root["traces"]
            self._reopen(present)

    def _reopen(self, present: TraceSet) -> None:
        held: dict[str, Samples | None] = {f"channels/{name}": one.samples for name, one in present.channels.items()}
        held |= {"drive_relative": present.drive.relative, "quality": present.quality}
        for path, samples in held.items():
            if isinstance(samples, ChunkSamples):
                parent, name = self._place(path)
                self._rows[path] = SampleRow(parent, name, samples.dtype, "", 0, samples)
        self._ends = _without_samples(present)

    def append(self, traces: TraceSet) -> None:
        """Add traces behind those that are there.

        Raises
        ------
        InputError
            Where their drive is in another unit; nothing is written then.
        """
        before = self._ends
        if before is not None and before.drive.unit != traces.drive.unit:
            raise InputError(
                f"the drive of new traces is in {traces.drive.unit}, that of the study in {before.drive.unit}",
                traces.sources[0].name if traces.sources else "",
                "give calibration.nm_per_volt or calibration.nm_per_second, or gather them into another study",
            )
        begin = 0 if before is None else before.samples
        for name, channel in traces.channels.items():
            self._row(f"channels/{name}", np.float32, channel.unit, _Constant(np.nan, begin))
        if traces.drive.relative is not None:
            steps = _Constant(np.nan, 0) if before is None else _Steps(before.offsets, before.drive.step)
            self._row("drive_relative", np.float32, traces.drive.unit, steps)
        if traces.quality is not None:
            self._row("quality", np.uint8, "", _Constant(0, begin))
        samples = {path: _samples_for(path, traces) for path in self._rows}
        for start in range(0, traces.samples, BLOCK_SAMPLES):  # side by side: rows share what is read of a recording
            stop = min(start + BLOCK_SAMPLES, traces.samples)
            for path, row in self._rows.items():
                row.append(samples[path], self._wrote, start, stop)
        self._ends = _without_samples(traces) if before is None else _joined(before, traces)

    def _row(self, path: str, dtype: npt.DTypeLike, unit: str, earlier: Samples) -> None:
        """Begin a channel that the traces so far did not have."""
        if path not in self._rows:
            parent, name = self._place(path)
            self._rows[path] = SampleRow(parent, name, dtype, unit, self._expected)
            self._rows[path].append(earlier)

    def _place(self, path: str) -> tuple[h5py.Group, str]:
        folder, _, name = path.rpartition("/")
        return (self._home[folder], name) if folder else (self._home, name)

    def _wrote(self, samples: int) -> None:
        self._done += samples
        total = max(self._expected * len(self._rows), self._done)
        self._work.tell("writing the study", self._done, total, "samples")

    def finish(self, key: str, recipe_key: str) -> TraceSet:
        """Write tables and checksums; return the traces without their samples.

        Parameters
        ----------
        key : str
            The key of the traces.
        recipe_key : str
            Says by which settings they were made.
        """
        if self._ends is None:
            raise StudyError("there are no traces to write", str(self._home.file.filename), "check the recordings")
        for row in self._rows.values():
            row.finish()
        home, traces = self._home, self._ends
        write_attribute(home, "key", key)
        write_attribute(home, "recipe_key", recipe_key)
        write_attribute(home, "drive_unit", traces.drive.unit)
        write_array(home, "offsets", traces.offsets)
        write_array(home, "drive_start", traces.drive.start, traces.drive.unit)
        step = traces.drive.step if "drive_relative" not in self._rows else np.full(traces.traces, np.nan)
        write_array(home, "drive_step", step, traces.drive.unit)
        write_text(home, "notes", json_text(traces.notes))
        for name in ("phases", "table"):
            if name in home:
                del home[name]
        write_columns(home.create_group("phases"), {name: getattr(traces.phases, name) for name in PHASES})
        write_columns(home.create_group("table"), traces.table)
        write_attribute(home["table"], "order", json.dumps(list(traces.table)))
        return traces


def _samples_for(path: str, traces: TraceSet) -> Samples:
    """Return what new traces have for a row; where they lack it, that it is unknown or nothing special."""
    if path == "drive_relative":
        steps = _Steps(traces.offsets, traces.drive.step)
        return steps if traces.drive.relative is None else traces.drive.relative
    if path == "quality":
        return _Constant(0, traces.samples) if traces.quality is None else traces.quality
    channel = traces.channels.get(path.removeprefix("channels/"))
    return _Constant(np.nan, traces.samples) if channel is None else channel.samples


def _without_samples(traces: TraceSet) -> TraceSet:
    drive = replace(traces.drive, relative=None)
    return replace(traces, channels={}, drive=drive, quality=None)


def _joined(first: TraceSet, second: TraceSet) -> TraceSet:
    """Return the tables of two sets of traces, one behind the other."""
    first, second = _without_lone_measures(first, second), _without_lone_measures(second, first)
    rows = first.traces
    phases = second.phases
    moved = PhaseTable(phases.trace + rows, phases.start, phases.stop, phases.kind)
    table = _joined_tables(first.table, second.table, rows, second.traces)
    table["source"][rows:] += len(first.sources)
    partner = table["partner"][rows:]
    partner[partner >= 0] += rows
    return replace(
        first,
        offsets=np.concatenate([first.offsets, second.offsets[1:] + first.offsets[-1]]),
        drive=replace(
            first.drive,
            start=np.concatenate([first.drive.start, second.drive.start]),
            step=np.concatenate([first.drive.step, second.drive.step]),
        ),
        phases=PhaseTable(*(np.concatenate([getattr(first.phases, n), getattr(moved, n)]) for n in PHASES)),
        table=table,
        sources=(*first.sources, *second.sources),
        notes=_joined_notes(first.notes, second.notes),
    )


def _without_lone_measures(traces: TraceSet, other: TraceSet) -> TraceSet:
    """Return traces without the columns of plug-in measures that the others lack; they are measured anew when asked."""
    ours, theirs = traces.notes.get("measures", []), other.notes.get("measures", [])
    lone = [one for one in ours if one not in theirs]
    if not lone:
        return traces
    gone = {one["name"] for one in lone}
    notes = {**traces.notes, "measures": [one for one in ours if one in theirs]}
    return replace(traces, table={name: one for name, one in traces.table.items() if name not in gone}, notes=notes)


def _joined_tables(first: Table, second: Table, rows: int, more: int) -> dict[str, npt.NDArray[Any]]:
    joined = {}
    for name in {**first, **second}:
        known = first[name] if name in first else second[name]
        parts = [first.get(name, _unknown(known, rows)), second.get(name, _unknown(known, more))]
        if len({part.dtype.kind in "US" for part in parts}) > 1:
            parts = [part.astype(np.str_) for part in parts]
        joined[name] = np.concatenate(parts)
    return joined


def _unknown(like: npt.NDArray[Any], count: int) -> npt.NDArray[Any]:
    return np.full(count, "", np.str_) if like.dtype.kind in "US" else np.full(count, np.nan)


def _joined_notes(first: Mapping[str, Any], second: Mapping[str, Any]) -> dict[str, Any]:
    """Return the notes of both: lists one behind the other without repeats, counts summed, else the first."""
    joined = dict(first)
    for name, value in second.items():
        if name not in joined:
            joined[name] = value
        elif isinstance(value, list) and isinstance(joined[name], list):
            joined[name] = joined[name] + [one for one in value if one not in joined[name]]
        elif isinstance(value, int) and not isinstance(value, bool):
            joined[name] = joined[name] + value
    return joined

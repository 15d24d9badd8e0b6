"""TraceSet: the one data structure that every room speaks.

All samples of all traces stand end to end; ``offsets`` cuts every channel into traces.  A TraceSet is frozen: a
function that changes anything returns a new one.  Channels are either arrays in memory or readers of a file
(:class:`Samples`), so that a study of 500 million samples passes through memory block by block.

Conventions, everywhere in Meseta: ranges are half-open; ``start`` and ``stop`` within a trace count its samples from
0; conductance is G/G0 as float32 with NaN where the instrument gave none; drive values are float64 where they are
computed and float32 relative to the trace's own start where they are stored.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise
from typing import Any, Final, Protocol

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.work import Work, blocks_of

__all__ = [
    "DIRECTIONS",
    "PHASE_KINDS",
    "ArraySamples",
    "Channel",
    "Drive",
    "PhaseTable",
    "Quality",
    "Samples",
    "Source",
    "TraceIdentity",
    "TraceSet",
    "trace_table",
]

FloatArray = npt.NDArray[np.float32]
PHASE_KINDS: Final = ("approach", "pull", "hold", "push", "sweep")
"""Kinds of phase; the phase table stores the place in this tuple."""
DIRECTIONS: Final = ("opening", "closing")


class Quality:
    """Bits of the optional per-sample quality channel; 0 is a trusted sample."""

    SATURATED: Final = 1
    SLEWING: Final = 2
    SEAM: Final = 4
    UNTRUSTED: Final = 8


class Samples(Protocol):
    """A channel's samples, in memory or behind a file."""

    def __len__(self) -> int:
        """Return the number of samples."""
        ...

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop`` as one array that the caller must not write to."""
        ...


@dataclass(frozen=True)
class ArraySamples:
    """Samples that lie in memory."""

    values: npt.NDArray[Any]

    def __len__(self) -> int:
        return len(self.values)

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return a view of samples ``start`` to ``stop``."""
        return self.values[start:stop]


@dataclass(frozen=True)
class Channel:
    """A named channel: float32 samples (uint8 for quality) and their unit."""

    samples: Samples
    unit: str

    @classmethod
    def of(cls, values: npt.ArrayLike, unit: str) -> Channel:
        """Return a channel in memory; values are converted to float32."""
        return cls(ArraySamples(np.ascontiguousarray(values, np.float32)), unit)


@dataclass(frozen=True)
class Source:
    """A recording as it came from the laboratory.

    Attributes
    ----------
    sha256 : str
        Checksum of the file's bytes, in hexadecimal.
    name : str
        Name relative to the folder that was given.
    size_byte : int
        Size of the file.
    reader : str
        Name of the reader that understood it.
    layout : str
        One line: how the reader understood the file.
    """

    sha256: str
    name: str
    size_byte: int = 0
    reader: str = ""
    layout: str = ""


@dataclass(frozen=True, order=True)
class TraceIdentity:
    """What a trace *is*, whatever its row number: decisions and groups refer to this."""

    sha256: str
    dataset: str
    record_start: int
    direction: str

    def text(self) -> str:
        """Return the identity as one line of text, as decisions store it."""
        return f"{self.sha256}|{self.dataset}|{self.record_start}|{self.direction}"

    @classmethod
    def parse(cls, text: str) -> TraceIdentity:
        """Return the identity that :meth:`text` wrote."""
        sha256, rest = text.split("|", 1)
        dataset, record_start, direction = rest.rsplit("|", 2)
        return cls(sha256, dataset, int(record_start), direction)


@dataclass(frozen=True)
class Drive:
    """The drive axis of every trace: displacement in nm where calibrated, else the drive in its own unit.

    The drive at sample ``i`` of trace ``t`` is ``start[t] + step[t] * i``, or ``start[t] + relative[...]`` where an
    explicit channel is kept because the steps are not equal.

    Attributes
    ----------
    start : (traces,) float64
    step : (traces,) float64
        Ignored where ``relative`` is given.
    unit : str
        "nm", or the drive's own unit ("V", "s", "step").
    relative : Samples, optional
        (samples,) float32, relative to each trace's start.
    """

    start: npt.NDArray[np.float64]
    step: npt.NDArray[np.float64]
    unit: str
    relative: Samples | None = None

    @property
    def is_displacement(self) -> bool:
        """True where the drive is calibrated in nm."""
        return self.unit == "nm"


@dataclass(frozen=True)
class PhaseTable:
    """What the drive was doing: rows sorted by trace, then start.

    A rest on the way of a pull or push is a hold that lies within it.

    Attributes
    ----------
    trace, start, stop : (phases,) int64
        Row of the trace and half-open sample range within it.
    kind : (phases,) uint8
        Place in :data:`PHASE_KINDS`.
    """

    trace: npt.NDArray[np.int64]
    start: npt.NDArray[np.int64]
    stop: npt.NDArray[np.int64]
    kind: npt.NDArray[np.uint8]

    @classmethod
    def whole(cls, lengths: npt.NDArray[np.int64], directions: npt.NDArray[np.str_]) -> PhaseTable:
        """Return one phase a trace: pull for openings, push for closings."""
        pull, push = PHASE_KINDS.index("pull"), PHASE_KINDS.index("push")
        kind = np.where(np.asarray(directions) == "closing", push, pull).astype(np.uint8)
        rows = np.arange(len(lengths), dtype=np.int64)
        return cls(rows, np.zeros(len(lengths), np.int64), np.asarray(lengths, np.int64), kind)

    def block(self, first: int, last: int) -> PhaseTable:
        """Return the phases of traces ``first`` to ``last``, with trace numbers counted from ``first``."""
        lo, hi = np.searchsorted(self.trace, [first, last])
        return PhaseTable(self.trace[lo:hi] - first, self.start[lo:hi], self.stop[lo:hi], self.kind[lo:hi])

    def take(self, rows: npt.NDArray[np.int64]) -> PhaseTable:
        """Return the phases of the chosen traces (any order), renumbered."""
        begin, end = np.searchsorted(self.trace, rows), np.searchsorted(self.trace, rows, side="right")
        counts = end - begin
        index = np.concatenate([np.arange(a, b) for a, b in zip(begin, end, strict=True)] or [np.empty(0, np.int64)])
        index = index.astype(np.int64)
        trace = np.repeat(np.arange(len(rows), dtype=np.int64), counts)
        return PhaseTable(trace, self.start[index], self.stop[index], self.kind[index])


_STANDARD_COLUMNS: Final[dict[str, tuple[Any, Any]]] = {
    # name: (dtype, value where nothing is known)
    "source": (np.int32, 0),
    "dataset": (np.str_, ""),
    "record_start": (np.int64, 0),
    "direction": (np.str_, "opening"),
    "specimen": (np.str_, ""),
    "session": (np.str_, ""),
    "time_second": (np.float64, np.nan),
    "sample_interval_second": (np.float64, np.nan),
    "bias_volt": (np.float64, np.nan),
    "partner": (np.int64, -1),
}


def trace_table(traces: int, **columns: npt.ArrayLike) -> dict[str, npt.NDArray[Any]]:
    """Return a trace table: the standard columns, filled with "unknown" where not given, and any user column.

    Parameters
    ----------
    traces : int
        Number of rows.
    **columns : array_like
        (traces,) or scalar values.  Standard columns: ``source`` (row of the source), ``dataset`` (path within the
        recording), ``record_start`` (first raw sample), ``direction`` (opening, closing), ``specimen``, ``session``,
        ``time_second`` (since the epoch or the start of the record), ``sample_interval_second``, ``bias_volt``,
        ``partner`` (row of the trace of the other direction in the same cycle, else -1).
    """
    table: dict[str, npt.NDArray[Any]] = {}
    for name, (dtype, unknown) in _STANDARD_COLUMNS.items():
        given = np.asarray(columns.pop(name, unknown))
        values = given.astype(np.str_) if dtype is np.str_ else given.astype(dtype)
        table[name] = np.ascontiguousarray(np.broadcast_to(values, (traces,)))
    for name, given_column in columns.items():
        table[name] = np.ascontiguousarray(np.broadcast_to(np.asarray(given_column), (traces,)))
    return table


@dataclass(frozen=True)
class TraceSet:
    """Traces end to end, with their channels, drive axis, phases and table.

    Attributes
    ----------
    offsets : (traces + 1,) int64
        Sample at which each trace begins; the last entry is the number of samples.
    channels : mapping of str to Channel
        Always ``conductance`` (G/G0).  Others as recorded.
    drive : Drive
        The drive axis of every trace.
    phases : PhaseTable
    table : mapping of str to (traces,) array
        See :func:`trace_table`.
    sources : tuple of Source
        The recordings; ``table["source"]`` is the row in here.
    quality : Samples, optional
        (samples,) uint8 of :class:`Quality` bits; None where every sample is trusted.
    key : str
        Identifies the content: equal keys mean equal samples.
    notes : mapping
        What intake wants to say of these traces: assumptions, warnings, calibration (plain values only).
    """

    offsets: npt.NDArray[np.int64]
    channels: Mapping[str, Channel]
    drive: Drive
    phases: PhaseTable
    table: Mapping[str, npt.NDArray[Any]]
    sources: tuple[Source, ...]
    key: str
    quality: Samples | None = None
    notes: Mapping[str, Any] = field(default_factory=dict)

    @property
    def traces(self) -> int:
        """Number of traces."""
        return len(self.offsets) - 1

    @property
    def samples(self) -> int:
        """Number of samples in all."""
        return int(self.offsets[-1])

    @property
    def lengths(self) -> npt.NDArray[np.int64]:
        """(traces,) int64, samples a trace."""
        return np.diff(self.offsets)

    def __len__(self) -> int:
        return self.traces

    def read(self, channel: str, first: int, last: int) -> npt.NDArray[Any]:
        """Return a channel over traces ``first`` to ``last``, end to end."""
        return self.channels[channel].samples.read(int(self.offsets[first]), int(self.offsets[last]))

    @property
    def conductance(self) -> FloatArray:
        """(samples,) float32, G/G0 of all traces end to end; reads everything that lies in a file."""
        return self.read("conductance", 0, self.traces)

    def trace_conductance(self, trace: int) -> FloatArray:
        """(n,) float32, G/G0 of one trace."""
        return self.read("conductance", trace, trace + 1)

    def trace_drive(self, trace: int) -> npt.NDArray[np.float64]:
        """(n,) float64, drive axis of one trace in ``drive.unit``."""
        return self.drive_values(trace, trace + 1)

    def drive_values(self, first: int, last: int) -> npt.NDArray[np.float64]:
        """(n,) float64, drive axis of traces ``first`` to ``last``, end to end, in ``drive.unit``."""
        if self.drive.relative is not None:
            lengths = np.diff(self.offsets[first : last + 1])
            start = np.repeat(self.drive.start[first:last], lengths)
            relative = self.drive.relative.read(int(self.offsets[first]), int(self.offsets[last]))
            return start + relative.astype(np.float64)
        # trace by trace in place: no array of the length of all samples is repeated, so the interpreter stays free
        ends = (self.offsets[first : last + 1] - self.offsets[first]).tolist()
        values = np.empty(ends[-1], np.float64)
        index = np.arange(max((stop - start for start, stop in pairwise(ends)), default=0), dtype=np.float64)
        for row, (start, stop) in enumerate(pairwise(ends), first):
            part = values[start:stop]
            np.multiply(index[: stop - start], self.drive.step[row], out=part)
            part += self.drive.start[row]
        return values

    def identity(self, trace: int) -> TraceIdentity:
        """Return what trace number ``trace`` is."""
        row = self.table
        return TraceIdentity(
            self.sources[int(row["source"][trace])].sha256,
            str(row["dataset"][trace]),
            int(row["record_start"][trace]),
            str(row["direction"][trace]),
        )

    def identities(self, rows: npt.ArrayLike | None = None) -> list[str]:
        """Return the identity of every trace, or of the chosen ones, as text; quick for a hundred thousand."""
        index = slice(None) if rows is None else np.asarray(rows, np.int64)
        names = ("source", "dataset", "record_start", "direction")
        columns = zip(*(self.table[name][index].tolist() for name in names), strict=True)
        return [
            TraceIdentity(self.sources[source].sha256, dataset, start, direction).text()
            for source, dataset, start, direction in columns
        ]

    def row_of(self, identity: TraceIdentity) -> int:
        """Return the row of the trace that is ``identity``; -1 where there is none."""
        same = self.table["record_start"] == identity.record_start
        for row in np.flatnonzero(same).tolist():
            if self.identity(row) == identity:
                return row
        return -1

    def phase_range(self, kinds: Sequence[str]) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
        """Return the first contiguous sample range of each trace in which a phase of the given kinds runs.

        Returns
        -------
        start, stop : (traces,) int64
            Half-open range within each trace; empty (0, 0) where no phase is of these kinds.
        """
        start = np.zeros(self.traces, np.int64)
        stop = np.zeros(self.traces, np.int64)
        codes = [PHASE_KINDS.index(kind) for kind in kinds]
        rows = np.isin(self.phases.kind, codes)
        trace, first = np.unique(self.phases.trace[rows], return_index=True)
        start[trace] = self.phases.start[rows][first]
        stop[trace] = self.phases.stop[rows][first]
        return start, stop

    def blocks(self, work: Work) -> list[tuple[int, int]]:
        """Return ranges of traces of about ``work.block_samples`` samples each."""
        return blocks_of(self.offsets, work.block_samples)

    def block(self, first: int, last: int) -> TraceSet:
        """Return traces ``first`` to ``last`` in memory, rows counted from 0."""
        lo, hi = int(self.offsets[first]), int(self.offsets[last])
        drive = Drive(
            self.drive.start[first:last],
            self.drive.step[first:last],
            self.drive.unit,
            None if self.drive.relative is None else ArraySamples(self.drive.relative.read(lo, hi)),
        )
        return TraceSet(
            offsets=self.offsets[first : last + 1] - lo,
            channels={
                name: Channel(ArraySamples(channel.samples.read(lo, hi)), channel.unit)
                for name, channel in self.channels.items()
            },
            drive=drive,
            phases=self.phases.block(first, last),
            table={name: column[first:last] for name, column in self.table.items()},
            sources=self.sources,
            key=f"{self.key}[{first}:{last}]",
            quality=None if self.quality is None else ArraySamples(self.quality.read(lo, hi)),
            notes=self.notes,
        )

    def only(self, *channels: str) -> TraceSet:
        """Return the same traces with only the named channels, so that a block reads no more than it needs."""
        return replace(self, channels={name: self.channels[name] for name in channels})

    def take(self, rows: npt.ArrayLike) -> TraceSet:
        """Return the chosen traces, in the order given, in memory."""
        index = np.asarray(rows)
        index = np.flatnonzero(index) if index.dtype == bool else index.astype(np.int64)
        lengths = self.lengths[index]
        offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
        spans = [(int(self.offsets[row]), int(self.offsets[row + 1])) for row in index]

        def gather(samples: Samples, dtype: npt.DTypeLike) -> ArraySamples:
            parts = [samples.read(lo, hi) for lo, hi in spans]
            return ArraySamples(np.concatenate(parts) if parts else np.empty(0, dtype))

        digest = hashlib.sha256(self.key.encode() + index.tobytes()).hexdigest()
        return TraceSet(
            offsets=offsets,
            channels={n: Channel(gather(c.samples, np.float32), c.unit) for n, c in self.channels.items()},
            drive=Drive(
                self.drive.start[index],
                self.drive.step[index],
                self.drive.unit,
                None if self.drive.relative is None else gather(self.drive.relative, np.float32),
            ),
            phases=self.phases.take(index),
            table={name: column[index] for name, column in self.table.items()},
            sources=self.sources,
            key=digest,
            quality=None if self.quality is None else gather(self.quality, np.uint8),
            notes=self.notes,
        )

    @classmethod
    def from_arrays(
        cls,
        conductance_g0: npt.ArrayLike | Sequence[npt.ArrayLike],
        displacement_nm: npt.ArrayLike | Sequence[npt.ArrayLike] | None = None,
        *,
        step_nm: float | None = None,
        direction: npt.ArrayLike = "opening",
        **columns: npt.ArrayLike,
    ) -> TraceSet:
        """Build a TraceSet from arrays in memory.

        Parameters
        ----------
        conductance_g0 : (traces, n) array, or sequence of (n,) arrays
            Conductance of each trace in G0.
        displacement_nm : same shape, or (n,), optional
            Displacement of each sample.
        step_nm : float, optional
            Constant displacement a sample, instead of ``displacement_nm``.  Where neither is given the drive counts
            samples, in unit "step".
        direction : "opening" or "closing", or one a trace
        **columns : array_like
            Further columns of the trace table.

        Raises
        ------
        CallError
            Where lengths do not agree.
        """
        rows = [np.ascontiguousarray(row, np.float32).ravel() for row in conductance_g0]  # type: ignore[union-attr]
        if not rows:
            raise CallError("no traces were given", "TraceSet.from_arrays", "pass at least one trace")
        lengths = np.array([len(row) for row in rows], np.int64)
        offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
        drive = _drive_of(lengths, displacement_nm, step_nm)
        values = np.concatenate(rows)
        digest = hashlib.sha256(values.tobytes() + offsets.tobytes())
        digest.update(drive.start.tobytes() + drive.step.tobytes() + drive.unit.encode())
        if drive.relative is not None:
            digest.update(drive.relative.read(0, len(values)).tobytes())
        sha256 = digest.hexdigest()
        columns.setdefault("record_start", offsets[:-1])
        table = trace_table(len(rows), direction=direction, **columns)
        return cls(
            offsets=offsets,
            channels={"conductance": Channel.of(values, "G0")},
            drive=drive,
            phases=PhaseTable.whole(lengths, table["direction"]),
            table=table,
            sources=(Source(sha256, "memory", int(values.nbytes), "arrays", "arrays in memory"),),
            key=sha256,
        )

    def each_block(self, work: Work) -> Iterator[TraceSet]:
        """Yield the traces block by block, in memory, in order."""
        for first, last in self.blocks(work):
            work.check()
            yield self.block(first, last)


def _drive_of(
    lengths: npt.NDArray[np.int64],
    displacement_nm: npt.ArrayLike | Sequence[npt.ArrayLike] | None,
    step_nm: float | None,
) -> Drive:
    """Return the drive axis for :meth:`TraceSet.from_arrays`."""
    traces = len(lengths)
    if displacement_nm is None:
        unit, step = ("step", 1.0) if step_nm is None else ("nm", float(step_nm))
        return Drive(np.zeros(traces), np.full(traces, step), unit)
    if len(np.shape(displacement_nm[0])) == 0:  # type: ignore[index]
        shared = np.asarray(displacement_nm, np.float64)
        axes = [shared] * traces
    else:
        axes = [np.asarray(row, np.float64).ravel() for row in displacement_nm]  # type: ignore[union-attr]
    if len(axes) != traces or any(len(axis) != length for axis, length in zip(axes, lengths, strict=False)):
        raise CallError(
            "displacement and conductance have different lengths",
            "TraceSet.from_arrays",
            "give one displacement value a sample, or one axis for traces of equal length",
        )
    start = np.array([axis[0] if len(axis) else 0.0 for axis in axes])
    relative = np.concatenate([axis - begin for axis, begin in zip(axes, start, strict=True)])
    return Drive(start, np.full(traces, np.nan), "nm", ArraySamples(relative.astype(np.float32)))

"""Looking for damage in the samples of a study, and going on without what is lost."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from meseta.study.chunks import ChunkSamples
from meseta.traces import Channel, Samples, TraceSet
from meseta.work import Work

__all__ = ["Loss", "find_losses", "without_lost"]


@dataclass(frozen=True)
class Loss:
    """A damaged chunk.

    Attributes
    ----------
    channel : str
        Name of the channel, "drive" or "quality".
    chunk : int
        Number of the chunk.
    start, stop : int
        Samples that are lost, counted over all traces.
    first_trace, last_trace : int
        Traces that lose samples, the last one included.
    """

    channel: str
    chunk: int
    start: int
    stop: int
    first_trace: int
    last_trace: int

    def __str__(self) -> str:
        one = self.first_trace == self.last_trace
        traces = f"trace {self.first_trace}" if one else f"traces {self.first_trace} to {self.last_trace}"
        return f"{traces}: samples of '{self.channel}' are damaged (checksum)"


def _rows(traces: TraceSet) -> Mapping[str, ChunkSamples]:
    rows: dict[str, Samples | None] = {name: channel.samples for name, channel in traces.channels.items()}
    rows |= {"drive": traces.drive.relative, "quality": traces.quality}
    return {name: samples for name, samples in rows.items() if isinstance(samples, ChunkSamples)}


def find_losses(traces: TraceSet, work: Work) -> list[Loss]:
    """Check every chunk of every channel; what was checked before is not read again."""
    todo = [
        (name, samples, number)
        for name, samples in _rows(traces).items()
        for number in range(len(samples.places))
        if number not in samples.lost
    ]
    sizes = [samples.span(number)[1] - samples.span(number)[0] for _, samples, number in todo]
    damaged = work.each(lambda one: one[1].damaged(one[2]), todo, "checking the study", sizes=sizes, unit="samples")
    return [
        _loss(traces, name, samples, number) for (name, samples, number), bad in zip(todo, damaged, strict=True) if bad
    ]


def _loss(traces: TraceSet, name: str, samples: ChunkSamples, number: int) -> Loss:
    start, stop = samples.span(number)
    first, last = np.searchsorted(traces.offsets, [start, stop - 1], side="right") - 1
    return Loss(name, number, start, stop, int(first), int(last))


def without_lost(traces: TraceSet, losses: Sequence[Loss]) -> TraceSet:
    """Return the traces with lost samples as NaN, and column ``damaged`` true where a trace has any.

    Selection drops these traces with that reason; row numbers stay.
    """
    if not losses:
        return traces
    damaged = np.zeros(traces.traces, np.bool_)
    for loss in losses:
        damaged[loss.first_trace : loss.last_trace + 1] = True

    def spared(name: str, samples: Any) -> Any:
        gone = frozenset(loss.chunk for loss in losses if loss.channel == name)
        return replace(samples, lost=samples.lost | gone) if gone else samples

    statements = [str(loss) for loss in losses]
    return replace(
        traces,
        channels={name: Channel(spared(name, one.samples), one.unit) for name, one in traces.channels.items()},
        drive=replace(traces.drive, relative=spared("drive", traces.drive.relative)),
        quality=spared("quality", traces.quality),
        table={**traces.table, "damaged": damaged},
        notes={**traces.notes, "damage": statements},
        key=hashlib.sha256("\n".join([traces.key, *statements]).encode()).hexdigest(),
    )

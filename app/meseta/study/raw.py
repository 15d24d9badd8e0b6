"""Recordings as recorded, in the study file: group ``/raw``.

Consecutive recordings with the same channels are kept together as one *bundle*, so that ten thousand small files do
not become ten thousand groups.  Numbers are stored in the type of the recording, compressed, each block checksummed.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Final

import h5py
import numpy as np
import numpy.typing as npt

from meseta.intake.recording import RawChannel, Recording
from meseta.study.columns import json_text, write_array, write_attribute, write_text
from meseta.study.strict import dataset, group, names, read_array, read_text
from meseta.traces import Source
from meseta.work import Work

__all__ = ["read_recordings", "write_recordings"]

_BLOCK: Final = 65_536
_BUNDLE_SAMPLES: Final = 4_000_000
_DESCRIBED: Final = (
    "name",
    "role",
    "unit",
    "scale",
    "offset",
    "shared",
    "ground",
    "confidence",
    "doubts",
    "attributes",
)


@dataclass(frozen=True)
class _StoredSamples:
    """Samples of one recording within a stored channel (see :class:`meseta.traces.Samples`)."""

    stored: h5py.Dataset
    first: int
    last: int

    def __len__(self) -> int:
        return self.last - self.first

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        values: npt.NDArray[Any] = self.stored[self.first + start : self.first + max(stop, start)]
        return values


def _structure(recording: Recording) -> tuple[Any, ...]:
    return tuple((one.name, one.dtype.str, one.shared) for one in recording.channels)


def _bundles(recordings: Sequence[Recording]) -> Iterator[Sequence[Recording]]:
    """Yield the recordings of each bundle."""
    start = 0
    while start < len(recordings):
        stop, samples = start + 1, recordings[start].samples
        while (
            stop < len(recordings)
            and samples + recordings[stop].samples <= _BUNDLE_SAMPLES
            and _structure(recordings[stop]) == _structure(recordings[start])
        ):
            samples += recordings[stop].samples
            stop += 1
        yield recordings[start:stop]
        start = stop


def write_recordings(root: h5py.Group, recordings: Sequence[Recording], sources: Sequence[Source], work: Work) -> None:
    """Add recordings to ``/raw``; each belongs to the source with its checksum."""
    home = group(root, "raw") if "raw" in root else root.create_group("raw")
    total, done = sum(one.samples for one in recordings), 0
    rows = {one.sha256: row for row, one in enumerate(sources)}
    for bundle in _bundles(recordings):
        belongs = [rows[one.source.sha256] for one in bundle]
        _write_bundle(home.create_group(f"{belongs[0]:06d}"), belongs, bundle, work)
        done += sum(one.samples for one in bundle)
        work.tell("keeping the recordings", done, total, "samples")


def _write_bundle(home: h5py.Group, rows: Sequence[int], bundle: Sequence[Recording], work: Work) -> None:
    pieces = [one.pieces for one in bundle]
    write_array(home, "source", np.array(rows, np.int64))
    write_array(home, "pieces", np.array(pieces, np.int64))
    write_array(home, "piece_samples", np.concatenate([np.diff(one.offsets) for one in bundle]))
    write_array(home, "record_start", np.concatenate([one.record_start for one in bundle]))
    write_array(home, "dataset", np.concatenate([one.dataset for one in bundle]))
    write_text(home, "about", json_text([_about(one) for one in bundle]))
    channels = home.create_group("channels")
    for number, channel in enumerate(bundle[0].channels):
        parts = [one.channels[number].samples for one in bundle]
        stops = np.cumsum([len(part) for part in parts])
        made = channels.create_dataset(
            f"{number:03d}",
            shape=(int(stops[-1]),),
            dtype=channel.dtype,
            chunks=(max(min(_BLOCK, int(stops[-1])), 1),),
            compression="gzip",
            compression_opts=1,
            shuffle=True,
            fletcher32=True,
        )
        write_attribute(made, "name", channel.name)
        write_array(channels, f"{number:03d}_stop", stops.astype(np.int64))
        for stop, part in zip(stops, parts, strict=True):
            _copy(made, int(stop) - len(part), part, work)


def _copy(made: h5py.Dataset, first: int, samples: Any, work: Work) -> None:
    step = _BLOCK * 16
    for start in range(0, len(samples), step):
        work.check()
        stop = min(start + step, len(samples))
        made[first + start : first + stop] = samples.read(start, stop)


def _about(recording: Recording) -> dict[str, Any]:
    channels = []
    for channel in recording.channels:
        described = {name: getattr(channel, name) for name in _DESCRIBED}
        channels.append(described)
    table = {name: np.asarray(column).tolist() for name, column in recording.table.items()}
    return {
        "channels": channels,
        "metadata": dict(recording.metadata),
        "table": table,
        "doubts": list(recording.doubts),
    }


def read_recordings(root: h5py.Group, sources: Sequence[Source]) -> list[Recording]:
    """Return the recordings that were copied, in the order of the sources; readable while the file is open."""
    found: dict[int, Recording] = {}
    if "raw" in root:
        for name in names(group(root, "raw")):
            found.update(_read_bundle(group(group(root, "raw"), name), sources))
    return [found[row] for row in sorted(found)]


def _read_bundle(home: h5py.Group, sources: Sequence[Source]) -> dict[int, Recording]:
    rows, pieces = read_array(home, "source").tolist(), read_array(home, "pieces")
    about = json.loads(read_text(home, "about"))
    samples, record_start = read_array(home, "piece_samples"), read_array(home, "record_start")
    paths = read_array(home, "dataset")
    channels = group(home, "channels")
    stored = [name for name in names(channels) if not name.endswith("_stop")]
    data = [dataset(channels, name) for name in stored]
    stops = [np.concatenate([[0], read_array(channels, f"{name}_stop")]) for name in stored]
    ends = np.concatenate([[0], np.cumsum(pieces)])
    recordings = {}
    for place, row in enumerate(rows):
        here = slice(int(ends[place]), int(ends[place + 1]))
        described = about[place]["channels"]
        spans = [(int(stop[place]), int(stop[place + 1])) for stop in stops]
        recordings[row] = Recording(
            source=sources[row],
            channels=tuple(
                _channel(one, _StoredSamples(values, *span))
                for one, values, span in zip(described, data, spans, strict=True)
            ),
            offsets=np.concatenate([[0], np.cumsum(samples[here])]).astype(np.int64),
            record_start=record_start[here].astype(np.int64),
            dataset=paths[here],
            metadata=about[place]["metadata"],
            table={name: np.array(column) for name, column in about[place]["table"].items()},
            doubts=tuple(about[place]["doubts"]),
        )
    return recordings


def _channel(described: dict[str, Any], samples: _StoredSamples) -> RawChannel:
    plain = {name: described[name] for name in _DESCRIBED if name != "doubts"}
    return RawChannel(samples=samples, doubts=tuple(described["doubts"]), **plain)

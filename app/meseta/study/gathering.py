"""Taking recordings into a study."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from typing import Final

import h5py

from meseta.errors import InputError, MesetaError
from meseta.intake import Recording, open_recording
from meseta.intake.files import FoundFile
from meseta.intake.reading import traces_from
from meseta.recipe import Recipe
from meseta.study.growing import TraceWriter
from meseta.study.raw import write_recordings
from meseta.study.recordings import BATCH_SAMPLES
from meseta.study.state import Edit
from meseta.traces import Source
from meseta.work import Work

__all__ = ["Added", "take_in"]

_OPEN_FILES: Final = 200


@dataclass
class Added:
    """What came of files that were to be taken in.

    Attributes
    ----------
    sources : list of Source
        Recordings that were added; ``kept`` says whether each is "copied" or "linked".
    traces : int
        Traces that were added.
    known : list of str
        Names of recordings that the study had already.
    bad : list of MesetaError
        Files that could not be read.
    """

    sources: list[Source] = field(default_factory=list)
    kept: list[str] = field(default_factory=list)
    traces: int = 0
    known: list[str] = field(default_factory=list)
    bad: list[MesetaError] = field(default_factory=list)

    def add(self, other: Added) -> None:
        """Count what came of further files as well."""
        self.sources += other.sources
        self.kept += other.kept
        self.traces += other.traces
        self.known += other.known
        self.bad += other.bad

    def text(self) -> str:
        """Return one line for the history."""
        first = self.sources[0].name if self.sources else ""
        many = f"{len(self.sources)} recordings, the first {first}" if len(self.sources) != 1 else f"recording {first}"
        return f"{many}, {self.traces} traces"

    def edits(self) -> list[Edit]:
        """Return the edits of the history's entry: taking it back removes the recordings."""
        return [(("source", source.sha256), True, None) for source in self.sources]


def take_in(
    root: h5py.File,
    writer: TraceWriter,
    files: Sequence[FoundFile],
    recipe: Recipe,
    known: set[str],
    present: Sequence[Source],
    work: Work,
) -> Added:
    """Read files batch by batch, and write their traces and, where they are small enough, the recordings.

    Parameters
    ----------
    root, writer
        The study, and its traces.
    files : sequence of FoundFile
    recipe : Recipe
    known : set of str
        Checksums of the recordings that the study has; grows.
    present : sequence of Source
        The recordings that the study has.
    work : Work

    Returns
    -------
    Added
    """
    added = Added()
    size = sum(file.path.stat().st_size for file in files)
    copy = size <= recipe.study.copy_below_megabyte * 1e6
    for batch in _opened(files, recipe, known, added, work):
        good = _write_traces(batch, writer, recipe, added, work)
        added.sources += [one.source for one in good]
        added.kept += ["copied" if copy else "linked"] * len(good)
        if copy and good:
            write_recordings(root, good, (*present, *added.sources), work)
    return added


def _opened(
    files: Sequence[FoundFile], recipe: Recipe, known: set[str], added: Added, work: Work
) -> Iterator[list[Recording]]:
    """Yield batches of open recordings that the study does not have; each is closed when the next is asked for."""

    def opened(file: FoundFile) -> Recording | MesetaError:
        try:
            return open_recording(file.path, recipe, file.name)
        except InputError as error:
            return error

    with ExitStack() as stack:
        batch: list[Recording] = []
        for found in work.each(opened, files, "reading files", unit="files"):
            if isinstance(found, MesetaError):
                added.bad.append(found)
                continue
            if found.source.sha256 in known:
                added.known.append(found.source.name)
                found.close()
                continue
            known.add(found.source.sha256)
            if batch and (
                sum(one.samples for one in batch) + found.samples > BATCH_SAMPLES or len(batch) >= _OPEN_FILES
            ):
                yield batch
                stack.pop_all().close()
                batch = []
            batch.append(stack.enter_context(found))
        if batch:
            yield batch


def _write_traces(
    batch: Sequence[Recording], writer: TraceWriter, recipe: Recipe, added: Added, work: Work
) -> list[Recording]:
    """Write the traces of a batch; return the recordings that gave any."""
    quiet = work.quiet()
    try:
        large = sum(one.samples for one in batch) > BATCH_SAMPLES
        traces, good = traces_from(batch, recipe, quiet, stream=large), list(batch)
        writer.append(traces)
    except InputError as error:
        if len(batch) == 1:
            added.bad.append(error)
            return []
        return [one for single in batch for one in _write_traces([single], writer, recipe, added, work)]
    added.traces += traces.traces
    return good

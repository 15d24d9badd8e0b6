"""The recordings of a study: copied into it, or linked and found where the user points to."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path, PurePosixPath
from typing import Final

import h5py

from meseta.errors import StudyError
from meseta.intake import Recording, open_recording
from meseta.intake.joining import key_of
from meseta.intake.opening import sha256_of
from meseta.intake.reading import traces_from
from meseta.recipe import Recipe
from meseta.study.growing import TraceWriter
from meseta.study.raw import read_recordings
from meseta.traces import Source
from meseta.work import Work

__all__ = ["batches", "find_linked", "opened_recordings", "write_derived"]

BATCH_SAMPLES: Final = 8_000_000
"""Recordings are turned into traces in batches of about this size, one in memory at a time."""


def find_linked(source: Source, folders: Sequence[Path]) -> Path:
    """Return where a linked recording lies: in one of the folders that the user points to, by name and checksum.

    Raises
    ------
    StudyError
        Where none of the folders has it, or only a file of that name with another content.
    """
    name = PurePosixPath(source.name.replace("\\", "/"))
    changed = ""
    if not name.is_absolute() and ".." not in name.parts:
        for folder in folders:
            for place in dict.fromkeys((folder / name, folder / name.name)):
                if not place.is_file():
                    continue
                if place.stat().st_size == source.size_byte and sha256_of(place) == source.sha256:
                    return place
                changed = str(place)
    if changed:
        raise StudyError("is not the recording that the study knows (other checksum)", changed, "find the original")
    raise StudyError(
        f"recording '{source.name}' is linked, not copied, and not found",
        ", ".join(str(folder) for folder in folders) or "no folder given",
        "open the study with the folder of its recordings",
    )


@contextmanager
def opened_recordings(
    root: h5py.Group, sources: Sequence[Source], kept: Sequence[str], folders: Sequence[Path], recipe: Recipe
) -> Iterator[list[Recording]]:
    """Give the recordings of a study, one a source, in order; readable within the block.

    Raises
    ------
    StudyError
        Naming the first recording that is neither copied nor found.
    """
    copied = {one.source.sha256: one for one in read_recordings(root, sources)}
    with ExitStack() as stack:
        found = []
        for source, how in zip(sources, kept, strict=True):
            if source.sha256 in copied:
                found.append(copied[source.sha256])
                continue
            if how == "none":
                raise StudyError(f"recording '{source.name}' was not kept", "", "read the recordings again")
            found.append(stack.enter_context(open_recording(find_linked(source, folders), recipe, source.name)))
        yield found


def batches(recordings: Sequence[Recording], recipe: Recipe) -> Iterator[Sequence[Recording]]:
    """Yield recordings in order, a batch at a time; all at once where the calibration looks at all of them."""
    if recipe.calibration.offset_from_floor:
        yield recordings
        return
    start = 0
    while start < len(recordings):
        stop, samples = start + 1, recordings[start].samples
        while stop < len(recordings) and samples + recordings[stop].samples <= BATCH_SAMPLES:
            samples += recordings[stop].samples
            stop += 1
        yield recordings[start:stop]
        start = stop


def write_derived(writer: TraceWriter, recordings: Sequence[Recording], recipe: Recipe, work: Work) -> None:
    """Make traces of recordings and write them, batch by batch."""
    for batch in batches(recordings, recipe):
        large = sum(one.samples for one in batch) > BATCH_SAMPLES
        writer.append(traces_from(batch, recipe, work, stream=large))


def derived_key(sources: Sequence[Source], recipe: Recipe) -> str:
    """Return the key that these recordings' traces have, however they were read."""
    return key_of(sources, recipe)

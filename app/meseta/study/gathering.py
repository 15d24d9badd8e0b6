"""Taking recordings into a study."""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from itertools import chain
from pathlib import Path
from typing import Final

import h5py

from meseta.errors import InputError, MesetaError
from meseta.intake import Recording
from meseta.intake.files import FoundFile
from meseta.intake.floor import PooledFloor
from meseta.intake.meaning.context import batch_context, recordings_among
from meseta.intake.opening import OpenContext
from meseta.intake.reading import floor_of, traces_from
from meseta.intake.several import batches_of, open_several
from meseta.recipe import Recipe
from meseta.study.files import is_study
from meseta.study.growing import TraceWriter
from meseta.study.raw import write_recordings
from meseta.study.recordings import BATCH_SAMPLES
from meseta.study.seen import Look, Seen, look_at
from meseta.study.state import Edit
from meseta.traces import Source
from meseta.work import Work

__all__ = ["Added", "Present", "take_in", "without_changing"]

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
    failed : dict of Path to MesetaError
        Files that could not be taken in.
    files : list of Path
        Files whose recordings the study now has.
    """

    sources: list[Source] = field(default_factory=list)
    kept: list[str] = field(default_factory=list)
    traces: int = 0
    known: list[str] = field(default_factory=list)
    failed: dict[Path, MesetaError] = field(default_factory=dict)
    files: list[Path] = field(default_factory=list)

    @property
    def bad(self) -> list[MesetaError]:
        """Files that could not be taken in."""
        return list(self.failed.values())

    def add(self, other: Added) -> None:
        """Count what came of further files as well."""
        self.sources += other.sources
        self.kept += other.kept
        self.traces += other.traces
        self.known += other.known
        self.files += other.files
        taken = set(other.files)
        self.failed = {path: error for path, error in (self.failed | other.failed).items() if path not in taken}

    def text(self) -> str:
        """Return one line for the history."""
        first = self.sources[0].name if self.sources else ""
        many = f"{len(self.sources)} recordings, the first {first}" if len(self.sources) != 1 else f"recording {first}"
        return f"{many}, {self.traces} traces"

    def edits(self) -> list[Edit]:
        """Return the edits of the history's entry: taking it back removes the recordings."""
        return [(("source", source.sha256), True, None) for source in self.sources]


@dataclass(frozen=True)
class Present:
    """What the study has already.

    Attributes
    ----------
    sources : sequence of Source
    removed : collection of str
        Checksums of those that the user has removed.
    seen : Seen
        Files that were read before; grows.
    """

    sources: Sequence[Source] = ()
    removed: Collection[str] = ()
    seen: Seen = field(default_factory=Seen)


class _FilesChangedError(Exception):
    """Files have changed while they were read; what was written of them must be forgotten."""

    def __init__(self, files: Sequence[FoundFile]) -> None:
        super().__init__()
        self.paths = [file.path for file in files]


def without_changing(files: Sequence[FoundFile], attempt: Callable[[Sequence[FoundFile]], Added]) -> Added:
    """Return what came of files, anew without those that change while they are read; these are listed as bad."""
    left, restless = list(files), dict[Path, MesetaError]()
    while True:
        try:
            added = attempt(left)
        except _FilesChangedError as changed:
            restless |= {path: _restless(path) for path in changed.paths}
            left = [file for file in left if file.path not in restless]
        else:
            added.failed = restless | added.failed
            return added


def _restless(path: Path) -> InputError:
    return InputError("changes while it is read", str(path), "gather again once it is whole")


@dataclass(frozen=True)
class _Opened:
    file: FoundFile
    look: Look
    recording: Recording


def take_in(
    root: h5py.File,
    writer: TraceWriter,
    files: Sequence[FoundFile],
    recipe: Recipe,
    present: Present,
    work: Work,
) -> Added:
    """Read files batch by batch, and write their traces and, where they are small enough, the recordings.

    A file that looks as it did when it was read is not read again.  One that has another content since is told, and
    not taken in: that would silently count the same contact twice.

    Parameters
    ----------
    root, writer
        The study, and its traces.
    files : sequence of FoundFile
    recipe : Recipe
    present : Present
        What the study has.
    work : Work

    Returns
    -------
    Added
    """
    added = Added()
    known = {one.sha256 for one in present.sources}
    new = [file for file in files if not _is_known(file, present.seen, known, added)]
    size = sum(one.size_byte for one in present.sources)
    size += sum(look.size_byte for file in new if (look := look_at(file.path)) is not None)
    copy = size <= recipe.study.copy_below_megabyte * 1e6
    floor = None
    if recipe.calibration.offset_from_floor and len(new) > 1 and not present.sources:
        floor = floor_of(_each_once(new, recipe), recipe, work.quiet())
    for batch in _opened(new, recipe, present, known, added, work):
        good = _write_traces(batch, writer, recipe, added, work, floor)
        added.sources += [one.recording.source for one in good]
        added.kept += ["copied" if copy else "linked"] * len(good)
        if copy and good:
            write_recordings(root, [one.recording for one in good], (*present.sources, *added.sources), work)
        changed = [one.file for one in good if look_at(one.file.path) not in (None, one.look)]
        if changed:
            raise _FilesChangedError(changed)
        for one in good:
            added.files.append(one.file.path)
            present.seen.remember(one.file.path, one.look, one.recording.source.sha256)
    return added


def _each_once(files: Sequence[FoundFile], recipe: Recipe) -> Iterator[Recording]:
    """Yield the recordings of files, each open until the next is asked for; files that cannot be read are left out."""
    recordings = recordings_among(files, recipe.intake)
    context, seen = batch_context(recipe.intake, [file.path for file in recordings]), set[str]()
    for opened in chain.from_iterable(_open(batch, recipe, context) for batch in batches_of(recordings)):
        if not isinstance(opened, MesetaError):
            with opened.recording as recording:
                if recording.source.sha256 not in seen:
                    yield recording
                seen.add(recording.source.sha256)


def _is_known(file: FoundFile, seen: Seen, known: Collection[str], added: Added) -> bool:
    """Return whether a file is one that was read before and has not changed since; counts it."""
    look = look_at(file.path)
    if look is None or seen.checksum(file.path, look) not in known:
        return False
    added.known.append(file.name)
    added.files.append(file.path)
    return True


def _opened(
    files: Sequence[FoundFile], recipe: Recipe, present: Present, known: set[str], added: Added, work: Work
) -> Iterator[list[_Opened]]:
    """Yield batches of open recordings that the study does not have; each is closed when the next is asked for."""
    recordings = recordings_among(files, recipe.intake)
    added.files += [file.path for file in files if file not in recordings]
    files = recordings
    context = batch_context(recipe.intake, [file.path for file in files])
    with ExitStack() as stack:
        batch: list[_Opened] = []
        batches = batches_of(files)
        sizes = [len(one) for one in batches]
        looked = work.each(lambda one: _open(one, recipe, context), batches, "reading files", sizes=sizes, unit="files")
        for file, found in zip(files, chain.from_iterable(looked), strict=True):
            if isinstance(found, MesetaError):
                added.failed[file.path] = found
                continue
            source = found.recording.source
            if source.sha256 in known:
                added.known.append(source.name)
                added.files.append(file.path)
                present.seen.remember(file.path, found.look, source.sha256)
                found.recording.close()
                continue
            earlier = present.seen.checksum(file.path)
            if earlier in known and earlier not in present.removed:
                added.failed[file.path] = _replaced(file)
                found.recording.close()
                continue
            known.add(source.sha256)
            if batch and (
                sum(one.recording.samples for one in batch) + found.recording.samples > BATCH_SAMPLES
                or len(batch) >= _OPEN_FILES
            ):
                yield batch
                stack.pop_all().close()
                batch = []
            batch.append(found)
            stack.enter_context(found.recording)
        if batch:
            yield batch


def _open(files: Sequence[FoundFile], recipe: Recipe, context: OpenContext) -> list[_Opened | MesetaError]:
    """Open a batch of files; return what is wrong with those that are no whole recordings."""
    looks = [look_at(file.path) for file in files]
    studies = [
        _fault_of_study(file.path) if look is not None else None for file, look in zip(files, looks, strict=True)
    ]
    plain = [file for file, fault in zip(files, studies, strict=True) if fault is None]
    opened = open_several(plain, recipe, context)
    return [
        _looked_at(file, look, next(opened)) if fault is None else fault
        for file, look, fault in zip(files, looks, studies, strict=True)
    ]


def _fault_of_study(path: Path) -> InputError | None:
    try:
        if is_study(path):
            return InputError("is a Meseta study, no recording", str(path), "gather the recordings it was made of")
    except InputError as error:
        return error
    return None


def _looked_at(file: FoundFile, look: Look | None, opened: Recording | InputError) -> _Opened | MesetaError:
    """Return an opened file, unless it changed since it was looked at."""
    if isinstance(opened, InputError):
        return opened
    if look is None or look_at(file.path) not in (None, look):
        opened.close()
        return _restless(file.path)
    return _Opened(file, look, opened)


def _replaced(file: FoundFile) -> InputError:
    return InputError(
        "has another content than when it was taken in; the study keeps what it held then",
        str(file.path),
        "remove its recording from the study and gather again, or give the new content a name of its own",
    )


def _write_traces(
    batch: Sequence[_Opened],
    writer: TraceWriter,
    recipe: Recipe,
    added: Added,
    work: Work,
    floor: PooledFloor | None,
) -> list[_Opened]:
    """Write the traces of a batch; return the recordings that gave any."""
    quiet = work.quiet()
    try:
        large = sum(one.recording.samples for one in batch) > BATCH_SAMPLES
        traces, good = (
            traces_from([one.recording for one in batch], recipe, quiet, stream=large, floor=floor),
            list(batch),
        )
        writer.append(traces)
    except InputError as error:
        if len(batch) == 1:
            added.failed[batch[0].file.path] = error
            return []
        return [one for single in batch for one in _write_traces([single], writer, recipe, added, work, floor)]
    added.traces += traces.traces
    return good

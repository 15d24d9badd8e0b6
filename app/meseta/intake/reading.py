"""Files -> TraceSet."""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

from meseta.errors import InputError, MesetaError
from meseta.intake.alike import Memory
from meseta.intake.assembly import Part, plan_of
from meseta.intake.files import FoundFile, find_files
from meseta.intake.floor import PooledFloor, pooled_floor, remove_floor_offset, tails_of
from meseta.intake.joining import joined
from meseta.intake.meaning.context import batch_context, recordings_among, rows_without_file
from meseta.intake.opening import OpenContext, open_recording
from meseta.intake.readers.unpack import sha256_of
from meseta.intake.recording import Recording
from meseta.intake.room import TooLargeError, check_room
from meseta.intake.several import batches_of, open_several
from meseta.recipe import Recipe
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["floor_of", "read", "traces_from"]


def read(
    paths: str | Path | Iterable[str | Path],
    recipe: Recipe | None = None,
    work: Work | None = None,
    *,
    strict: bool = False,
    so_far: Callable[[int, Callable[[], TraceSet]], None] | None = None,
) -> TraceSet:
    """Read recordings into a TraceSet: open, calibrate, cut, and put end to end.

    Parameters
    ----------
    paths : str, Path, or several
        A file, a folder, a pattern, or several of them.
    recipe : Recipe, optional
        Its ``intake``, ``calibration`` and ``cutting`` sections are used.
    work : Work, optional
    strict : bool
        Raise for the first bad file instead of taking in the good ones.
    so_far : callable, optional
        Told after each of several files how many are read, with a function that returns the traces read so far (with no
        offset from the floor removed, which takes all of them).

    Returns
    -------
    TraceSet
        ``notes["bad_files"]`` lists what could not be read (what, where, remedy), ``notes["assumptions"]`` what was
        assumed, ``notes["incomplete"]`` what was kept apart, ``notes["passed_over"]`` files that are no recordings.

    Raises
    ------
    InputError
        Where nothing can be read.
    """
    recipe, work = recipe or Recipe(), work or Work()
    found_files, passed = find_files(paths)
    files = recordings_among(found_files, recipe.intake)
    context = batch_context(recipe.intake, [file.path for file in files])
    parts: list[Part] = []
    bad: list[MesetaError] = []
    one_file, size = len(files) == 1, 0
    for found in iter([_one(files[0], recipe, context, work)]) if one_file else _each(files, recipe, context, work):
        if isinstance(found, Part):
            parts.append(found)
            size += found.memory_byte
            check_room(size, f"{len(parts)} of {len(files)} files")
            if so_far is not None and not one_file:
                so_far(len(parts), lambda: joined([part for part in parts if part.traces], recipe, {}))
        elif strict or isinstance(found, TooLargeError):  # the largest of many is not left out in silence
            raise found
        else:
            bad.append(found)
    parts = [part for part in parts if part.traces]
    if not parts:
        raise _nothing(bad, files)
    traces = _joined(parts, recipe, {"bad_files": [_plain(error) for error in bad], "passed_over": passed})
    traces.notes["assumptions"].extend(rows_without_file(files, context))
    return traces


def floor_of(recordings: Iterable[Recording], recipe: Recipe, work: Work) -> PooledFloor:
    """Return the offset from the floor that recordings show together; only their ends are read, one after the other."""
    tails = {}
    for recording in recordings:
        with contextlib.suppress(InputError):  # what it says is said when its traces are made
            tails[recording.source.sha256] = tails_of(_loaded(recording, recipe, work, stream=True))
    return pooled_floor(tails)


def traces_from(
    recordings: Sequence[Recording],
    recipe: Recipe | None = None,
    work: Work | None = None,
    *,
    stream: bool = False,
    floor: PooledFloor | None = None,
) -> TraceSet:
    """Return the traces of recordings that are open: calibrated, cut, and put end to end.

    Parameters
    ----------
    recordings : sequence of Recording
    recipe : Recipe, optional
    work : Work, optional
    stream : bool
        Leave the samples in the recordings, which must then stay open: each channel is worked out block by block as it
        is read, so that memory stays small however large the recording.
    floor : PooledFloor, optional
        Offset from the floor that these show together with others; else what they show themselves is removed.

    Raises
    ------
    InputError
        Where a recording's channels do not give conductance, or no trace is found.
    """
    recipe, work = recipe or Recipe(), work or Work()
    memory = Memory()
    parts = [_loaded(recording, recipe, work, stream, memory) for recording in recordings]
    parts = [part for part in parts if part.traces]
    if not parts:
        raise InputError("no traces were found", "recordings", "check the cutting settings")
    return _joined(parts, recipe, {"bad_files": [], "passed_over": []}, floor)


def _joined(parts: Sequence[Part], recipe: Recipe, notes: dict[str, Any], floor: PooledFloor | None = None) -> TraceSet:
    """Return loaded parts end to end, with the offset removed that all of them together show."""
    if floor is not None:
        notes = {**notes, "floor_offset": floor.remove({part.recording.source.sha256: part for part in parts})}
    elif recipe.calibration.offset_from_floor:
        notes = {**notes, "floor_offset": remove_floor_offset(parts)}
    return joined(parts, recipe, notes)


def _alone(work: Work) -> Work:
    """Return work for one of many files: on the calling thread, without reports of its own."""
    return Work(threads=1, block_samples=work.block_samples, cancel=work.cancel)


def _each(files: Sequence[FoundFile], recipe: Recipe, context: OpenContext, work: Work) -> Iterator[Part | InputError]:
    """Yield the traces of each of several files, or what is wrong with it, in order."""
    memory, alone = Memory(), _alone(work)

    def take(batch: Sequence[FoundFile]) -> list[Part | InputError]:
        taken: list[Part | InputError] = []
        for opened in open_several(batch, recipe, context):
            alone.check()
            taken.append(opened if isinstance(opened, InputError) else _taken(opened, recipe, alone, memory))
        return taken

    batches = batches_of(files)
    sizes = [len(batch) for batch in batches]
    for taken in work.each(take, batches, "reading files", sizes=sizes, unit="files"):
        yield from taken


def _taken(recording: Recording, recipe: Recipe, work: Work, memory: Memory) -> Part | InputError:
    try:
        with recording:
            return _loaded(recording, recipe, work, memory=memory).let_go()
    except InputError as error:
        return error


def _loaded(
    recording: Recording, recipe: Recipe, work: Work, stream: bool = False, memory: Memory | None = None
) -> Part:
    part = plan_of(recording, recipe, memory)
    if not part.traces:
        raise InputError("holds no traces", recording.source.name, "check the cutting settings")
    part = part.stream(work) if stream else part.load(work)
    part.settle_directions()
    return part


def _one(file: FoundFile, recipe: Recipe, context: OpenContext, work: Work) -> Part:
    """Return the traces of the only file; its checksum is worked out beside the read."""
    with (
        ThreadPoolExecutor(1, thread_name_prefix="meseta-checksum") as pool,
        open_recording(file.path, recipe, file.name, context, checksum=False) as recording,
    ):
        if recording.source.sha256:
            return _loaded(recording, recipe, work).let_go()
        digest = pool.submit(sha256_of, file.path)
        part = _loaded(recording, recipe, work).let_go()
        try:
            source = replace(part.recording.source, sha256=digest.result())
        except OSError as error:
            raise InputError(f"cannot be read ({error})", str(file.path), "check the file and the disk") from error
        part.recording = replace(part.recording, source=source)
        return part


def _plain(error: MesetaError) -> dict[str, Any]:
    return {"what": error.what, "where": error.where, "remedy": error.remedy}


def _nothing(bad: Sequence[MesetaError], files: Sequence[FoundFile]) -> MesetaError:
    if len(bad) == 1 or (bad and len({error.what for error in bad}) == 1):
        return bad[0]
    first = f"; the first: {bad[0]}" if bad else ""
    return InputError(f"none of {len(files)} files can be read{first}", "", "see `meseta peek` on one of them")

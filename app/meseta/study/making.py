"""Making a study of recordings."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from contextlib import ExitStack
from pathlib import Path

import h5py

from meseta.errors import CallError, InputError, StudyError
from meseta.intake.files import FoundFile
from meseta.recipe import Recipe
from meseta.study.arriving import files_meant
from meseta.study.files import clear_unfinished
from meseta.study.gathering import Added, Present, take_in, without_changing
from meseta.study.growing import TraceWriter
from meseta.study.history import History
from meseta.study.loading import write_content
from meseta.study.lock import Lock
from meseta.study.parts import FROM_RAW
from meseta.study.recordings import derived_key
from meseta.study.seen import look_at
from meseta.study.state import State
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["create_study", "hold_name", "make_study"]


def create_study(
    path: str | Path, files: Iterable[str | Path], recipe: Recipe | None = None, work: Work | None = None
) -> Added:
    """Make a new study of recordings; refuses to replace a file.

    Raises
    ------
    CallError
        Where the file exists.
    InputError
        Where no file can be read; nothing is left behind.
    StudyError
        Where another process is making it.
    """
    path = Path(path)
    with ExitStack() as stack:
        hold_name(path, stack)
        found = files_meant(files, path)
        if not found:
            raise InputError("holds no recordings", ", ".join(map(str, files)), "give files or another folder")
        return make_study(path, found, recipe or Recipe(), work or Work())


def hold_name(path: Path, stack: ExitStack) -> None:
    """Make sure that nobody else makes a study of that name until the stack is closed.

    Raises
    ------
    CallError
        Where the file exists.
    StudyError
        Where another process is making it.
    """
    if path.exists():
        raise CallError("exists already", str(path), "gather into it, or choose another name")
    try:
        lock = Lock(path)
    except OSError:
        return  # making the file will say why it cannot be made there
    if lock.holder is not None:
        raise StudyError(f"is being made by {lock.holder}", str(path), "wait for it, or choose another name")
    stack.callback(lock.release)
    clear_unfinished(path)


def make_study(path: Path, found: Sequence[FoundFile], recipe: Recipe, work: Work) -> Added:
    """Make a study of files whose name is held.

    Raises
    ------
    InputError
        Where none of them can be read.
    """

    def attempt(files: Sequence[FoundFile]) -> Added:
        added, present = Added(), Present()

        def fill(root: h5py.File) -> tuple[TraceSet, Sequence[str]]:
            nonlocal added
            writer = TraceWriter(root, work, _expected_samples(files))
            added = take_in(root, writer, files, recipe, present, work)
            if not added.sources:
                raise added.bad[0] if added.bad else InputError("holds no recordings", str(path), "give other files")
            present.seen.write(root)
            return writer.finish(derived_key(added.sources, recipe), recipe.key(FROM_RAW)), added.kept

        write_content(path, State(recipe), lambda: History.begun(f"study made: {added.text()}"), fill)
        return added

    return without_changing(found, attempt)


def _expected_samples(files: Sequence[FoundFile]) -> int:
    """Return a guess of the samples in files, for the size of chunks and the progress bar."""
    return sum(look.size_byte for file in files if (look := look_at(file.path)) is not None) // 4

"""Gathering recordings into a study, once or as they are written."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any, Final

import h5py

from meseta.errors import CallError, InputError, MesetaError, StudyError
from meseta.intake import find_files
from meseta.intake.files import FoundFile
from meseta.recipe import Recipe
from meseta.study.files import is_study
from meseta.study.gathering import Added, take_in
from meseta.study.growing import TraceWriter
from meseta.study.history import History
from meseta.study.loading import write_content
from meseta.study.parts import FROM_RAW
from meseta.study.recordings import derived_key
from meseta.study.state import State
from meseta.study.study import Study
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["create_study", "folders_of", "gather"]

_FOLLOW_SECONDS: Final = 2.0


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
    """
    path, recipe, work = Path(path), recipe or Recipe(), work or Work()
    if path.exists():
        raise CallError("exists already", str(path), "gather into it, or choose another name")
    found = find_files(files)[0]
    added = Added()

    def fill(root: h5py.File) -> tuple[TraceSet, Sequence[str]]:
        nonlocal added
        writer = TraceWriter(root, work, _expected_samples(found))
        added = take_in(root, writer, found, recipe, set(), (), work)
        if not added.sources:
            raise added.bad[0] if added.bad else InputError("holds no recordings", str(path), "give other files")
        return writer.finish(derived_key(added.sources, recipe), recipe.key(FROM_RAW)), added.kept

    write_content(path, State(recipe), lambda: History.begun(f"study made: {added.text()}"), fill)
    return added


def gather(
    files: Iterable[str | Path],
    study_path: str | Path,
    recipe: Recipe | None = None,
    work: Work | None = None,
    follow: bool = False,
) -> tuple[dict[str, Any], list[MesetaError]]:
    """Add recordings to a study, which is made if it does not exist.

    Parameters
    ----------
    files : iterable of str or Path
    study_path : str or Path
    recipe : Recipe, optional
        Put in force first, where given.
    work : Work, optional
    follow : bool
        Keep taking in new files until the work is cancelled.  A file is taken once it has stopped growing.

    Returns
    -------
    dict
        ``recordings_added``, ``traces_added``, ``already_there``, ``recordings``, ``traces``.
    list of MesetaError
        Files that could not be read.
    """
    named, path, work, total = list(files), Path(study_path), work or Work(), Added()
    if path.exists() and not is_study(path):
        raise StudyError("is not a Meseta study", str(path), "choose another name for --into")
    made = not path.exists()
    if made:
        total.add(create_study(path, named, recipe, work))
    with Study.open(path, folders=folders_of(named)) as study:
        if not made:
            if recipe is not None:
                study.change(recipe=recipe)
            total.add(study.add(_others(named, path), work))
        if follow:
            _follow(study, named, work, total)
        study.save()
        return _answer(study, total), total.bad


def _answer(study: Study, total: Added) -> dict[str, Any]:
    return {
        "study": str(study.path),
        "recordings_added": len(total.sources),
        "traces_added": total.traces,
        "already_there": len(set(total.known)),
        "recordings": len(study.sources),
        "traces": study.traces(Work()).traces,
    }


def _follow(study: Study, named: Sequence[str | Path], work: Work, total: Added) -> None:
    """Look for new files every few seconds until cancelled; each content of a file is tried once."""
    seen: dict[Path, tuple[int, int]] = {}
    tried: set[tuple[Path, tuple[int, int]]] = set()
    while not work.cancel.wait(_FOLLOW_SECONDS):
        files = _others(named, study.path)
        sizes = _sizes(files)
        ready = [
            file
            for file in files
            if sizes.get(file.path) == seen.get(file.path, ()) and (file.path, sizes[file.path]) not in tried
        ]
        seen = sizes
        tried |= {(file.path, sizes[file.path]) for file in ready}
        if ready:
            total.add(study.add(ready, work))


def _sizes(files: Sequence[FoundFile]) -> dict[Path, tuple[int, int]]:
    """Return size and time of change of files, by which a file still being written is recognised."""
    found = {}
    for file in files:
        try:
            stat = file.path.stat()
        except OSError:
            continue  # it was moved away since the folder was listed
        found[file.path] = (stat.st_size, stat.st_mtime_ns)
    return found


def _others(named: Sequence[str | Path], study: Path) -> list[FoundFile]:
    """Return the files that are meant, without the study itself and what lies beside it."""
    try:
        found = find_files(named)[0]
    except InputError:
        if any(not Path(given).exists() for given in named):
            raise
        return []  # a folder that is still empty
    home = study.resolve()
    return [
        file for file in found if file.path.resolve().parent != home.parent or not file.path.name.startswith(home.name)
    ]


def folders_of(named: Sequence[str | Path]) -> list[Path]:
    """Return the folders that the user points to by naming files."""
    folders = [Path(given) if Path(given).is_dir() else Path(given).parent for given in named]
    return list(dict.fromkeys(folders))


def _expected_samples(files: Sequence[FoundFile]) -> int:
    """Return a guess of the samples in files, for the size of chunks and the progress bar."""
    return sum(file.path.stat().st_size for file in files) // 4

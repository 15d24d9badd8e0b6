"""Adding recordings to a study, once or as they are written."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any

from meseta.errors import Cancelled, MesetaError, StudyError
from meseta.recipe import Recipe
from meseta.study import following
from meseta.study.arriving import files_meant, folders_of
from meseta.study.files import is_study
from meseta.study.following import Following, put_in_force
from meseta.study.gathering import Added
from meseta.study.making import create_study
from meseta.study.study import Study
from meseta.work import Progress, Work

__all__ = ["gather"]

Say = Callable[[MesetaError], None]
Grown = Callable[[Study, Added], None]


def gather(
    files: Iterable[str | Path],
    study_path: str | Path,
    recipe: Recipe | None = None,
    work: Work | None = None,
    follow: bool = False,
    say: Say | None = None,
    grown: Grown | None = None,
) -> tuple[dict[str, Any], list[MesetaError]]:
    """Add recordings to a study, which is made if it does not exist.

    A file is read once: what looks as it did when it was read is passed over, and so is another file of the same
    content.  A file that has changed since is listed as bad, and the study keeps what it held.

    Parameters
    ----------
    files : iterable of str or Path
        Folders stand for the files in them and in their subfolders.
    study_path : str or Path
    recipe : Recipe, optional
        Put in force first, where given.
    work : Work, optional
    follow : bool
        Keep taking in new files until the work is cancelled.  A file is taken once it is whole: it has stopped
        growing, no program has it open for writing, and what is to stand beside it is there (or was waited for).
    say : callable, optional
        Told, while following, of each bad file at once, and once until it changes.
    grown : callable, optional
        Told, while following, of the study and of what was added to it.

    Returns
    -------
    dict
        ``study``, ``recordings_added``, ``traces_added``, ``already_there``, ``recordings``, ``traces``.
    list of MesetaError
        Files that could not be taken in.
    """
    named, path, work = list(files), Path(study_path), work or Work()
    if path.exists() and not is_study(path):
        raise StudyError("is not a Meseta study", str(path), "choose another name for --into")
    if follow:
        return _follow(Following(named, path, recipe), work, say or _nobody, grown or _nobody)
    total = Added()
    made = not path.exists()
    if made:
        total.add(create_study(path, named, recipe, work))
    with Study.open(path, folders=folders_of(named)) as study:
        if not made:
            put_in_force(study, recipe)
            total.add(study.add(files_meant(named, path), work))
        study.save()
        return _answer(path, study, total), total.bad


def _nobody(*_: Any) -> None:
    """Tell nobody."""


def _follow(one: Following, work: Work, say: Say, grown: Grown) -> tuple[dict[str, Any], list[MesetaError]]:
    """Look every few seconds until cancelled; what was taken in stays, whatever ends it."""
    try:
        while not work.cancel.is_set():
            try:
                looked = one.look(work)
            except Cancelled:
                break
            for error in looked.bad:
                say(error)
            if looked.added.sources and one.study is not None:
                grown(one.study, looked.added)
            words = f"following: {looked.words}" if looked.words else "following"
            work.report(Progress(words, len(one.total.sources), 0, "recordings"))
            if not looked.ready and work.cancel.wait(following.FOLLOW_SECONDS):
                break
        if one.study is not None:
            one.study.save()
        return _answer(one.path, one.study, one.total), one.total.bad
    finally:
        one.close()
        if one.study is not None:
            one.study.close()


def _answer(path: Path, study: Study | None, total: Added) -> dict[str, Any]:
    return {
        "study": str(path),
        "recordings_added": len(total.sources),
        "traces_added": total.traces,
        "already_there": len(set(total.known)),
        "recordings": 0 if study is None else len(study.sources),
        "traces": 0 if study is None else study.traces(Work()).traces,
    }

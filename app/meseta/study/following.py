"""Gathering recordings into a study, once or as they are written.

Recordings stand in a study in the order in which they were taken in; those of one look in natural order.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterable, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import h5py

from meseta.errors import CallError, Cancelled, InputError, MesetaError, StudyError
from meseta.intake.context import batch_context
from meseta.intake.files import FoundFile
from meseta.recipe import Recipe
from meseta.study.arriving import Arrivals, Waiting, files_meant, folders_of
from meseta.study.files import clear_unfinished, is_study
from meseta.study.gathering import Added, Present, take_in, without_changing
from meseta.study.growing import TraceWriter
from meseta.study.history import History
from meseta.study.loading import write_content
from meseta.study.lock import Lock
from meseta.study.parts import FROM_RAW
from meseta.study.recordings import derived_key
from meseta.study.seen import Look, look_at
from meseta.study.state import State
from meseta.study.study import Study
from meseta.traces import TraceSet
from meseta.work import Progress, Work

__all__ = ["create_study", "folders_of", "gather"]

_FOLLOW_SECONDS: Final = 2.0
_LOOSE_BYTE: Final = 64_000_000
"""So much beyond twice its size a study may grow before room that earlier commits left behind is given back."""
Say = Callable[[MesetaError], None]


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
        _begin(path, stack)
        found = files_meant(files, path)
        if not found:
            raise InputError("holds no recordings", ", ".join(map(str, files)), "give files or another folder")
        return _created(path, found, recipe or Recipe(), work or Work())


def _begin(path: Path, stack: ExitStack) -> None:
    """Make sure that nobody else makes a study of that name meanwhile."""
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


def _created(path: Path, found: Sequence[FoundFile], recipe: Recipe, work: Work) -> Added:
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


def gather(
    files: Iterable[str | Path],
    study_path: str | Path,
    recipe: Recipe | None = None,
    work: Work | None = None,
    follow: bool = False,
    say: Say | None = None,
    grown: Callable[[Study, Added], None] | None = None,
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
        Told of each bad file at once, and once until it changes.
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
        return _follow(_Following(named, path, recipe, work, say or _nobody, grown or _nobody))
    total = Added()
    made = not path.exists()
    if made:
        total.add(create_study(path, named, recipe, work))
    with Study.open(path, folders=folders_of(named)) as study:
        if not made:
            _put_in_force(study, recipe)
            total.add(study.add(files_meant(named, path), work))
        study.save()
        return _answer(path, study, total), total.bad


def _nobody(*_: Any) -> None:
    """Tell nobody."""


def _put_in_force(study: Study, recipe: Recipe | None) -> None:
    if study.read_only:
        raise StudyError(
            f"cannot be added to: {study.why_read_only}", str(study.path), "end that first, or gather into another one"
        )
    if recipe is not None:
        study.change(recipe=recipe)


def _answer(path: Path, study: Study | None, total: Added) -> dict[str, Any]:
    return {
        "study": str(path),
        "recordings_added": len(total.sources),
        "traces_added": total.traces,
        "already_there": len(set(total.known)),
        "recordings": 0 if study is None else len(study.sources),
        "traces": 0 if study is None else study.traces(Work()).traces,
    }


# -- following --------------------------------------------------------------------------------------------------------


@dataclass
class _Following:
    """What is followed, and how far it has come."""

    named: Sequence[str | Path]
    path: Path
    recipe: Recipe | None
    work: Work
    say: Say
    grown: Callable[[Study, Added], None]
    study: Study | None = None
    total: Added = field(default_factory=Added)
    arrivals: Arrivals = field(default_factory=Arrivals)
    trouble: str = ""
    tight_byte: int = 0


def _follow(one: _Following) -> tuple[dict[str, Any], list[MesetaError]]:
    """Look every few seconds until cancelled; what was taken in stays, whatever ends it."""
    with ExitStack() as stack:
        making = stack.enter_context(ExitStack())
        if one.path.exists():
            _open(one, stack)
        else:
            files_meant(one.named, one.path)  # what is named must be there at the beginning
            _begin(one.path, making)
        while True:
            try:
                _look(one, stack, making)
            except Cancelled:
                break
            if one.work.cancel.wait(_FOLLOW_SECONDS):
                break
        if one.study is not None:
            one.study.save()
        return _answer(one.path, one.study, one.total), one.total.bad


def _open(one: _Following, stack: ExitStack) -> None:
    one.study = stack.enter_context(Study.open(one.path, folders=folders_of(one.named)))
    _put_in_force(one.study, one.recipe)
    one.tight_byte = one.path.stat().st_size


def _look(one: _Following, stack: ExitStack, making: ExitStack) -> None:
    """Look once, and take in what is whole."""
    try:
        ready = one.arrivals.look(one.named, one.path, _table(one), _nothing if one.study is None else one.study.knows)
        added = _taken(one, ready, stack, making) if ready else Added()
    except InputError as error:  # the folder is away, or a table of metadata is half written
        if str(error) != one.trouble:
            one.trouble = str(error)
            one.say(error)
        one.work.report(Progress(f"following: waiting ({error.what})", len(one.total.sources), 0, "recordings"))
        return
    one.trouble = ""
    tried = {*added.files, *added.failed}
    one.arrivals.done([file for file in ready if file.path in tried])
    one.total.known += one.arrivals.known
    told = {path: str(wrong) for path, wrong in one.total.failed.items()}
    for path, wrong in added.failed.items():
        if told.get(path) != str(wrong):
            one.say(wrong)
    one.total.add(added)
    for file in one.arrivals.late:
        one.say(_late(file))
    if added.sources and one.study is not None:
        one.grown(one.study, added)
        _tighten(one, one.study)
    one.work.report(Progress(_status(one.arrivals.waiting), len(one.total.sources), 0, "recordings"))


def _tighten(one: _Following, study: Study) -> None:
    """Write a study anew that has grown to twice its size; each commit leaves its former tables behind in the file."""
    if one.path.stat().st_size <= 2 * one.tight_byte + _LOOSE_BYTE:
        return
    with contextlib.suppress(StudyError):  # no room for a second file: it stays as it is
        study.rewrite(one.work)
    one.tight_byte = one.path.stat().st_size


def _nothing(_: Path, __: Look) -> bool:
    return False


def _late(file: FoundFile) -> InputError:
    return InputError(
        "its file of metadata came or changed after it was taken in; the study keeps what was known then",
        str(file.path),
        "gather into a new study to have it read",
    )


def _table(one: _Following) -> frozenset[str] | None:
    recipe = one.study.recipe if one.study is not None else one.recipe or Recipe()
    if recipe.intake.metadata_table is None:
        return None
    return frozenset(batch_context(recipe.intake).table)


def _taken(one: _Following, ready: Sequence[FoundFile], stack: ExitStack, making: ExitStack) -> Added:
    if one.study is not None:
        return one.study.add(ready, one.work)

    def attempt(files: Sequence[FoundFile]) -> Added:
        return _created(one.path, files, one.recipe or Recipe(), one.work)

    try:
        added = attempt(ready)
    except InputError:
        added = _what_is_wrong(ready, attempt)
    if added.sources:
        making.close()
        one.recipe = None
        _open(one, stack)
    return added


def _what_is_wrong(files: Sequence[FoundFile], attempt: Callable[[Sequence[FoundFile]], Added]) -> Added:
    """Return what is wrong with each of files of which none could be read; ends with one that meanwhile can."""
    wrong = Added()
    for file in files:
        try:
            good = attempt([file])
        except InputError as error:
            wrong.failed[file.path] = error
        else:
            good.failed |= wrong.failed
            return good
    return wrong


def _status(waiting: Sequence[Waiting]) -> str:
    if not waiting:
        return "following"
    more = f", and {len(waiting) - 1} more" if len(waiting) > 1 else ""
    return f"following: {waiting[0].file.name} waits ({waiting[0].why}){more}"


def _expected_samples(files: Sequence[FoundFile]) -> int:
    """Return a guess of the samples in files, for the size of chunks and the progress bar."""
    return sum(look.size_byte for file in files if (look := look_at(file.path)) is not None) // 4

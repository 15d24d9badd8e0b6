"""Following folders: one look at a time, what is whole is taken into the study.

Recordings stand in a study in the order in which they were taken in; those of one look in natural order.
"""

from __future__ import annotations

import contextlib
from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from meseta.errors import InputError, MesetaError, StudyError
from meseta.intake.files import FoundFile
from meseta.intake.meaning.context import batch_context
from meseta.recipe import Recipe
from meseta.study.arriving import Arrivals, Waiting, files_meant, folders_of
from meseta.study.gathering import Added
from meseta.study.making import hold_name, make_study
from meseta.study.parts import FROM_RAW
from meseta.study.seen import Look, look_at
from meseta.study.study import Study
from meseta.work import Work

__all__ = ["FOLLOW_SECONDS", "Following", "Looked", "put_in_force"]

FOLLOW_SECONDS = 2.0
"""From one look to the next."""
_LOOSE_BYTE: Final = 64_000_000
"""So much beyond twice its size a study may grow before room that earlier commits left behind is given back."""
_PORTION_FILES: Final = 200
_PORTION_BYTE: Final = 64_000_000
"""So much is taken in at once at least; beyond that as much as the study holds, so that writing grows in proportion."""


@dataclass(frozen=True)
class Looked:
    """What one look found and took in.

    Attributes
    ----------
    added : Added
        What was taken in.
    bad : tuple of MesetaError
        What is told for the first time: files that cannot be read, have another content than before, or got metadata
        too late; a folder that is away.
    ready : tuple of FoundFile
        Files that are whole and not taken in: there are many of them, or they were not to be taken.
    waiting : tuple of Waiting
        Files that are not whole yet, and why.
    trouble : InputError, optional
        Why nothing could be looked at or taken in.
    """

    added: Added
    bad: tuple[MesetaError, ...] = ()
    ready: tuple[FoundFile, ...] = ()
    waiting: tuple[Waiting, ...] = ()
    trouble: InputError | None = None

    @property
    def words(self) -> str:
        """What is waited for, in one line; empty where nothing is."""
        if self.trouble is not None:
            return f"waiting ({self.trouble.what})"
        if self.ready:
            return f"{len(self.ready)} more to take in"
        if not self.waiting:
            return ""
        more = f", and {len(self.waiting) - 1} more" if len(self.waiting) > 1 else ""
        return f"{self.waiting[0].file.name} waits ({self.waiting[0].why}){more}"


class Following:
    """Takes files that are written in folders into a study, a look at a time; not to be used by two threads at once.

    Parameters
    ----------
    named : sequence of str or Path
        Folders to follow.
    path : Path
        The study; it is made of the first files that are whole if it is not there.
    recipe : Recipe, optional
        Put in force first, where given.
    study : Study, optional
        That study, where it is open already.

    Attributes
    ----------
    study : Study or None
        None until it is made.  Whoever follows closes it.
    total : Added
        All that was taken in so far.

    Raises
    ------
    InputError
        Where what is to be followed is not there.
    StudyError
        Where another process holds the study.
    """

    def __init__(
        self, named: Sequence[str | Path], path: Path, recipe: Recipe | None = None, study: Study | None = None
    ) -> None:
        self.named, self.path, self.recipe, self.study = list(named), path, recipe, study
        self.total = Added()
        self._arrivals, self._trouble, self._tight_byte, self._read_by = Arrivals(), "", 0, ""
        self._making = ExitStack()
        if study is None and not path.exists():
            files_meant(self.named, path)  # what is named must be there at the beginning
            hold_name(path, self._making)
        else:
            self._begin_in(study)

    def _begin_in(self, study: Study | None) -> None:
        opened = study or Study.open(self.path)
        try:
            put_in_force(opened, self.recipe)
        except MesetaError:
            if study is None:
                opened.close()
            raise
        for folder in folders_of(self.named):
            opened.point_to(folder)
        self.study, self._tight_byte = opened, self.path.stat().st_size

    def close(self) -> None:
        """Give free the name of a study that was not made."""
        self._making.close()

    # -- looking --------------------------------------------------------------------------------------------------

    def look(self, work: Work, *, take: bool = True) -> Looked:
        """Look once, and take in what is whole; of many files a first portion.

        Parameters
        ----------
        work : Work
        take : bool
            False: only say what could be taken in.

        Raises
        ------
        StudyError
            Where the study cannot be written; it is as it was.
        """
        self._try_again()
        try:
            ready = self._arrivals.look(self.named, self.path, self._table(), self._knows)
            now = self._portion(ready) if take else []
            added = self._taken(now, work) if now else Added()
        except InputError as error:  # the folder is away, or a table of metadata is half written
            new = (error,) if str(error) != self._trouble else ()
            self._trouble = str(error)
            return Looked(Added(), new, trouble=error)
        self._trouble = ""
        bad = self._count(now, added)
        if added.sources:
            self._tighten(work)
        return Looked(added, bad, tuple(ready[len(now) :]), tuple(self._arrivals.waiting))

    def _try_again(self) -> None:
        """Try bad files again once what decides how files are read has changed."""
        read_by = self._recipe.key(FROM_RAW)
        if read_by != self._read_by:
            self._read_by = read_by
            self._arrivals.again(self.total.failed)

    @property
    def _recipe(self) -> Recipe:
        return self.study.recipe if self.study is not None else self.recipe or Recipe()

    def _knows(self, path: Path, look: Look) -> bool:
        return self.study is not None and self.study.knows(path, look)

    def _table(self) -> frozenset[str] | None:
        recipe = self._recipe
        if recipe.intake.metadata_table is None:
            return None
        return frozenset(batch_context(recipe.intake).table)

    def _portion(self, ready: Sequence[FoundFile]) -> list[FoundFile]:
        """Return the first of many files: whoever watches sees them come, and a change never waits for all of them."""
        held = () if self.study is None else self.study.sources
        most, room = max(_PORTION_FILES, len(held)), max(_PORTION_BYTE, sum(one.size_byte for one in held))
        portion: list[FoundFile] = []
        for file in ready[:most]:
            look = look_at(file.path)
            room -= 0 if look is None else look.size_byte
            if portion and room < 0:
                break
            portion.append(file)
        return portion

    def _count(self, tried: Sequence[FoundFile], added: Added) -> tuple[MesetaError, ...]:
        """Count what came of a look; return what is to be told."""
        came = {*added.files, *added.failed}
        self._arrivals.done([file for file in tried if file.path in came])
        self.total.known += self._arrivals.known
        told = {path: str(wrong) for path, wrong in self.total.failed.items()}
        new = [wrong for path, wrong in added.failed.items() if told.get(path) != str(wrong)]
        self.total.add(added)
        return (*new, *map(_late, self._arrivals.late))

    # -- taking in ------------------------------------------------------------------------------------------------

    def _taken(self, files: Sequence[FoundFile], work: Work) -> Added:
        if self.study is not None:
            return self.study.add(files, work)
        try:
            added = self._made(files, work)
        except InputError:
            added = self._what_is_wrong(files, work)
        if added.sources:
            self._making.close()
            self.recipe = None
            self._begin_in(None)
        return added

    def _made(self, files: Sequence[FoundFile], work: Work) -> Added:
        return make_study(self.path, files, self.recipe or Recipe(), work)

    def _what_is_wrong(self, files: Sequence[FoundFile], work: Work) -> Added:
        """Return what is wrong with each of files of which none could be read; ends with one that meanwhile can."""
        wrong = Added()
        for file in files:
            try:
                good = self._made([file], work)
            except InputError as error:
                wrong.failed[file.path] = error
            else:
                good.failed |= wrong.failed
                return good
        return wrong

    def _tighten(self, work: Work) -> None:
        """Write a study anew that has grown to twice its size; each commit leaves its former tables behind."""
        assert self.study is not None
        if self.path.stat().st_size <= 2 * self._tight_byte + _LOOSE_BYTE:
            return
        with contextlib.suppress(StudyError):  # no room for a second file: it stays as it is
            self.study.rewrite(work)
        self._tight_byte = self.path.stat().st_size


def put_in_force(study: Study, recipe: Recipe | None) -> None:
    """Give a study a recipe before anything is added to it.

    Raises
    ------
    StudyError
        Where it cannot be added to.
    """
    if study.read_only:
        raise StudyError(
            f"cannot be added to: {study.why_read_only}", str(study.path), "end that first, or gather into another one"
        )
    if recipe is not None:
        study.change(recipe=recipe)


def _late(file: FoundFile) -> InputError:
    return InputError(
        "its file of metadata came or changed after it was taken in; the study keeps what was known then",
        str(file.path),
        "gather into a new study to have it read",
    )

"""Recordings larger than the memory: a run first gathers them into a study beside its result, and works on that."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

from meseta.command.frame import RecipeChoice, list_bad, open_analysis, recipe_from, say_passed_over
from meseta.errors import MesetaError
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis

__all__ = ["opened_for_run"]

Opened = tuple["Analysis", list[MesetaError], Sequence[str]]


@contextmanager
def opened_for_run(
    files: Sequence[str], folder: Path, choice: RecipeChoice, strict: bool, work: Work
) -> Iterator[Opened]:
    """Give the analysis of a study or of recordings, whatever their size, the files left out, and what it was read of.

    Where the traces are too large for the memory they are gathered into a study in a folder beside ``folder``, for as
    long as the ``with`` block takes; what it was read of is then that study.
    """
    from meseta.intake.room import TooLargeError

    try:
        opened = (*open_analysis(files, choice, strict, work), files)
    except TooLargeError as error:
        click.echo(f"meseta: {error.where}: {error.what}; gathered into a study and worked through in blocks", err=True)
    else:
        yield opened
        return
    with _folder_beside(folder) as beside:
        yield _gathered(files, beside / "study.h5", choice, strict, work)


@contextmanager
def _folder_beside(folder: Path) -> Iterator[Path]:
    """Give a folder on the disk of the result; it goes with all that is in it."""
    from meseta.run import nearest_folder

    with tempfile.TemporaryDirectory(prefix=".meseta-", dir=nearest_folder(folder)) as beside:
        yield Path(beside)


def _gathered(files: Sequence[str], study_path: Path, choice: RecipeChoice, strict: bool, work: Work) -> Opened:
    from meseta import intake, study

    bad = study.create_study(study_path, files, recipe_from(*choice), work).bad
    list_bad(bad, strict)
    say_passed_over(intake.find_files(files)[1])
    analysis, _ = open_analysis([str(study_path)], (None, None, ()), strict, work)
    return analysis, bad, [str(study_path)]

"""Anything a user may name -> TraceSet: studies and recordings alike."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from meseta import intake
from meseta.errors import CallError
from meseta.recipe import Recipe
from meseta.study.files import is_study
from meseta.study.study import Study
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["read"]

Paths = str | Path | Sequence[str | Path]


def read(paths: Paths, recipe: Recipe | None = None, work: Work | None = None) -> TraceSet:
    """Read recordings or a study.

    Parameters
    ----------
    paths : str, Path, or sequence of them
        A file, folder, glob, study, or several files.
    recipe : Recipe, optional
        What is known of the files; a study has its own.
    work : Work, optional
        Threads, progress, cancel.

    Returns
    -------
    TraceSet
        The traces of a study stay in its file and are read block by block.
    """
    named = [paths] if isinstance(paths, str | Path) else list(paths)
    studies = [path for path in named if is_study(path)]
    if studies and len(named) > 1:
        raise CallError("a study is read alone", str(studies[0]), "gather recordings into it with `meseta gather`")
    if studies:
        return Study.open(studies[0], read_only=True).traces(work)
    traces: TraceSet = intake.read(named, recipe or Recipe(), work or Work())
    return traces

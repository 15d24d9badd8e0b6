"""Opening and saving, off the window's thread: plain functions of frozen inputs."""

from __future__ import annotations

import json
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError, MesetaError, OutputError
from meseta.recipe import Recipe
from meseta.selection.decisions import Decisions
from meseta.traces import TraceSet
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.study import Study

__all__ = [
    "Opened",
    "Unfinished",
    "export_results",
    "open_paths",
    "opened_study",
    "read_unfinished",
    "write_columns",
    "write_unfinished",
]


@dataclass(frozen=True)
class Opened:
    """What was opened: traces, their recipe and decisions, and the study they live in, if they live in one.

    ``files_read`` is not 0 while reading goes on.
    """

    traces: TraceSet
    recipe: Recipe
    decisions: Decisions
    name: str
    paths: tuple[str, ...]
    study: Any = None
    files_read: int = 0

    def derive(self, recipe: Recipe, work: Work) -> TraceSet:
        """Return the traces as another calibration or cutting makes them of the same recordings."""
        from meseta import study

        if self.study is None:
            return study.read(list(self.paths), recipe, work)
        return _measured(self.study.traces(work, recipe), recipe, work)


class _Growth:
    """Hands over what is read so far: early, then about every second."""

    def __init__(self, take: Callable[[int, TraceSet], None]) -> None:
        self._take, self._due = take, time.monotonic() + FIRST_SECOND

    def __call__(self, files: int, traces: Callable[[], TraceSet]) -> None:
        """Take note of one more file."""
        if time.monotonic() >= self._due:
            self._take(files, traces())
            self._due = time.monotonic() + NEXT_SECOND


FIRST_SECOND, NEXT_SECOND = 0.7, 1.2
"""So long reading goes on before what is read so far is shown, and then shown again."""


def open_paths(
    paths: Sequence[str], recipe: Recipe | None, work: Work, part: Callable[[Opened], None] | None = None
) -> Opened:
    """Read recordings or open a study.

    Parameters
    ----------
    paths : sequence of str
        One study, or files and folders of one recording.
    recipe : Recipe, optional
        What is known of the files; a study has its own.
    work : Work
    part : callable, optional
        Takes what is read so far, while reading goes on.
    """
    from meseta import intake, study

    missing = [path for path in paths if not Path(path).exists()]
    if missing:
        raise InputError("does not exist", missing[0], "check the path")
    if len(paths) == 1 and study.is_study(paths[0]):
        return _open_study(paths[0], work)
    chosen = recipe or Recipe()
    name = _name_of(paths)

    def take(files: int, traces: TraceSet) -> None:
        if part is not None:
            part(Opened(traces, chosen, Decisions(), name, tuple(paths), files_read=files))

    growth = None if part is None else _Growth(take)
    traces = _measured(intake.read(list(paths), chosen, work, so_far=growth), chosen, work)
    if not traces.traces:
        raise InputError("has no traces", name, "look at the file check: meseta peek")
    return Opened(traces, chosen, Decisions(), name, tuple(paths))


def _measured(traces: TraceSet, recipe: Recipe, work: Work) -> TraceSet:
    from meseta.selection import with_measures

    return with_measures(traces, recipe.selection.measures, work)


def _open_study(path: str, work: Work) -> Opened:
    from meseta.study import Study

    opened = Study.open(path)
    try:
        return opened_study(opened, work)
    except MesetaError:
        opened.close()
        raise


def opened_study(study: Study, work: Work) -> Opened:
    """Return what a study holds now."""
    recipe, path = study.recipe, str(study.path)
    traces = _measured(study.traces(work, recipe), recipe, work)
    return Opened(traces, recipe, study.decisions, study.path.stem, (path,), study)


def _name_of(paths: Sequence[str]) -> str:
    first = Path(paths[0])
    if len(paths) == 1:
        return first.stem if first.is_file() else first.name
    return f"{first.parent.name or first.stem}, {len(paths)} files"


def export_results(analysis: Analysis, folder: str, title: str, paths: Sequence[str], work: Work) -> str:
    """Write the whole result into a folder; return its name."""
    from meseta.run import run_analysis

    return str(run_analysis(analysis, Path(folder), work, title=title, files=list(paths)).folder)


def write_columns(path: str, columns: Mapping[str, npt.NDArray[Any]], _: Work) -> str:
    """Write columns as CSV; return the path."""
    from meseta.tables import write_csv

    try:
        write_csv(Path(path), {name: np.asarray(column) for name, column in columns.items()})
    except OSError as error:
        raise OutputError(f"cannot be written ({error.strerror or error})", path, "choose another place") from error
    return path


# -- a session that was not saved ------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Unfinished:
    """What an interrupted session leaves behind: which files were open, and all that was set and decided."""

    paths: tuple[str, ...]
    recipe: str
    decisions: Mapping[str, Any]
    place: Mapping[str, Any] = field(default_factory=dict)


def write_unfinished(path: Path, unfinished: Unfinished) -> None:
    """Write what would be lost, whole or not at all."""
    plain = {
        "schema": 1,
        "paths": list(unfinished.paths),
        "recipe": unfinished.recipe,
        "decisions": unfinished.decisions,
        "place": unfinished.place,
    }
    path.parent.mkdir(parents=True, exist_ok=True)
    partial = path.with_suffix(".partial")
    partial.write_text(json.dumps(plain), encoding="utf-8")
    partial.replace(path)


def read_unfinished(path: Path) -> Unfinished | None:
    """Return what an interrupted session left, or None where there is nothing that can be used."""
    try:
        plain = json.loads(path.read_text(encoding="utf-8"))
        if plain.get("schema") != 1 or not plain["paths"]:
            return None
        return Unfinished(tuple(plain["paths"]), plain["recipe"], plain["decisions"], plain.get("place", {}))
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return None

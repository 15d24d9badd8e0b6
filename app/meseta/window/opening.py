"""Opening and saving, off the window's thread: plain functions of frozen inputs."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.analysis import Analysis
from meseta.errors import InputError, MesetaError, OutputError
from meseta.recipe import Recipe
from meseta.selection import Decisions
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = [
    "Opened",
    "Unfinished",
    "export_results",
    "open_paths",
    "read_unfinished",
    "write_columns",
    "write_unfinished",
]


@dataclass(frozen=True)
class Opened:
    """What was opened: traces, their recipe and decisions, and the study they live in, if they live in one."""

    traces: TraceSet
    recipe: Recipe
    decisions: Decisions
    name: str
    paths: tuple[str, ...]
    study: Any = None


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
    from meseta import study

    missing = [path for path in paths if not Path(path).exists()]
    if missing:
        raise InputError("does not exist", missing[0], "check the path")
    if len(paths) == 1 and study.is_study(paths[0]):
        return _open_study(paths[0], work)
    chosen = recipe or Recipe()
    name = _name_of(paths)
    files = _plain_files(paths)
    if part is not None and len(files) > FIRST_FILES:
        first = study.read(files[:FIRST_FILES], chosen, work)
        part(Opened(first, chosen, Decisions(), name, tuple(paths)))
    traces = study.read(list(paths), chosen, work)
    if not traces.traces:
        raise InputError("has no traces", name, "look at the file check: meseta peek")
    return Opened(traces, chosen, Decisions(), name, tuple(paths))


FIRST_FILES = 200
"""So many files are read and shown before all of them are."""


def _plain_files(paths: Sequence[str]) -> list[str]:
    """Return the files named, or those of the one folder named, in natural order; nothing of nested folders."""
    from natsort import natsorted

    if len(paths) == 1 and Path(paths[0]).is_dir():
        return [
            str(one) for one in natsorted(Path(paths[0]).iterdir()) if one.is_file() and not one.name.startswith(".")
        ]
    return list(paths) if all(Path(path).is_file() for path in paths) else []


def _open_study(path: str, work: Work) -> Opened:
    from meseta.study import Study

    opened = Study.open(path)
    try:
        return Opened(opened.traces(work), opened.recipe, opened.decisions, Path(path).stem, (path,), opened)
    except MesetaError:
        opened.close()
        raise


def _name_of(paths: Sequence[str]) -> str:
    first = Path(paths[0])
    if len(paths) == 1:
        return first.stem if first.is_file() else first.name
    return f"{first.parent.name or first.stem}, {len(paths)} files"


def export_results(analysis: Analysis, folder: str, title: str, work: Work) -> str:
    """Write the whole result into a folder; return its name."""
    from meseta.run import run_analysis

    return str(run_analysis(analysis, Path(folder), work, title=title).folder)


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
    current: int = 0


def write_unfinished(path: Path, unfinished: Unfinished) -> None:
    """Write what would be lost, whole or not at all."""
    plain = {
        "schema": 1,
        "paths": list(unfinished.paths),
        "recipe": unfinished.recipe,
        "decisions": unfinished.decisions,
        "current": unfinished.current,
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
        return Unfinished(tuple(plain["paths"]), plain["recipe"], plain["decisions"], int(plain.get("current", 0)))
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return None

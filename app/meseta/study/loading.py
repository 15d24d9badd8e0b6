"""A study read into memory, part by part, and written as a whole."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

import h5py

from meseta.errors import MesetaError
from meseta.study.chunks import BlockFile
from meseta.study.content import read_sources, read_traces, write_sources
from meseta.study.files import looking, making
from meseta.study.growing import TraceWriter
from meseta.study.history import History
from meseta.study.parts import (
    FROM_RAW,
    read_decisions,
    read_history,
    read_recipe,
    read_versions,
    write_decisions,
    write_history,
    write_recipe,
    write_versions,
)
from meseta.study.state import State
from meseta.study.strict import names, read_attribute, reading
from meseta.traces import Source, TraceSet
from meseta.work import Work

__all__ = ["Content", "Fill", "load", "write_content", "write_whole_traces"]

Part = TypeVar("Part")
_KNOWN = frozenset(
    {
        "decisions",
        "events",
        "groups",
        "history",
        "length_series",
        "raw",
        "recipe",
        "removed",
        "results",
        "seen",
        "sources",
        "traces",
        "versions",
    }
)


@dataclass(frozen=True)
class Content:
    """What a study file holds.

    Attributes
    ----------
    identity : str
        The study's own, by which its journal is recognised.
    state : State
        Recipe and decisions as saved; defaults where damaged.
    sources, kept : tuple
        Recordings, and whether each is "copied", "linked" or "none".
    traces : TraceSet or None
        None where damaged.
    recipe_key : str
        Key of the settings that made the traces.
    damage : tuple of str
        What could not be read.
    unknown : tuple of str
        Names in the root that this version does not know; they are left alone.
    """

    identity: str
    state: State
    history: History
    versions: Mapping[str, str]
    sources: tuple[Source, ...]
    kept: tuple[str, ...]
    traces: TraceSet | None
    recipe_key: str
    damage: tuple[str, ...]
    unknown: tuple[str, ...]


def load(path: Path, blocks: BlockFile) -> Content:
    """Read everything but samples and recordings.

    Raises
    ------
    StudyError
        Where the file's table of contents is damaged, or it is newer than this version.
    """
    where, damage = str(path), list[str]()

    def part(what: str, function: Callable[[], Part], otherwise: Part) -> Part:
        try:
            return reading(what, where, function)
        except MesetaError as error:
            damage.append(error.what if error.what.startswith(what) else f"{what}: {error.what}")
            return otherwise

    with looking(path) as root:
        identity = reading("the table of contents", where, lambda: str(read_attribute(root, "id")))
        recipe = part("the recipe", lambda: read_recipe(root), State().recipe)
        decisions = part("the decisions", lambda: read_decisions(root), State().decisions)
        history = part("the history", lambda: read_history(root), History.begun("history lost"))
        versions = part("the versions", lambda: read_versions(root), dict[str, str]())
        no_sources: tuple[tuple[Source, ...], tuple[str, ...]] = ((), ())
        sources, kept = part("the list of recordings", lambda: read_sources(root), no_sources)
        nothing: tuple[TraceSet | None, str] = (None, "")
        traces, recipe_key = part("the traces", lambda: _traces(root, blocks, sources), nothing)
        unknown = tuple(
            name for name in part("the table of contents", lambda: names(root), list[str]()) if name not in _KNOWN
        )
    if recipe_key == recipe.key(FROM_RAW, with_errors=True):
        recipe_key = recipe.key(FROM_RAW)  # written when stated errors still counted among what makes traces
    return Content(
        *(identity, State(recipe, decisions), history, versions, sources, kept, traces, recipe_key),
        *(tuple(damage), unknown),
    )


def _traces(root: h5py.Group, blocks: BlockFile, sources: tuple[Source, ...]) -> tuple[TraceSet | None, str]:
    return read_traces(root, blocks, sources)


Fill = Callable[[h5py.File], tuple[TraceSet, Sequence[str]]]


def write_content(path: Path, state: State, history: Callable[[], History], fill: Fill, identity: str = "") -> None:
    """Write a whole study; a file of that name is replaced once everything is written.

    ``fill`` writes ``/traces`` and ``/raw``; it returns the traces with their sources, and how each of these is kept.
    ``history`` is asked for after that.
    """
    with making(path, identity) as root:
        traces, kept = fill(root)
        write_sources(root, traces.sources, kept)
        write_recipe(root, state.recipe)
        write_decisions(root, state.decisions)
        write_history(root, history())
        write_versions(root)


def write_whole_traces(root: h5py.Group, traces: TraceSet, recipe_key: str, work: Work) -> None:
    """Write ``/traces`` with one set of traces."""
    writer = TraceWriter(root, work, traces.samples)
    writer.append(traces)
    writer.finish(traces.key, recipe_key)

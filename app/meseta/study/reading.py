"""Anything a user may name -> TraceSet, and an analysis -> a new study."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import ExitStack
from pathlib import Path

import h5py

from meseta import intake
from meseta.analysis import Analysis
from meseta.errors import CallError, InputError
from meseta.intake import Recording, find_files, open_recording
from meseta.intake.meaning.context import batch_context, recordings_among
from meseta.recipe import Recipe
from meseta.selection import with_measures
from meseta.study.content import read_sources
from meseta.study.files import is_study, looking
from meseta.study.history import History
from meseta.study.loading import write_content, write_whole_traces
from meseta.study.outcomes import write_outcomes
from meseta.study.parts import FROM_RAW
from meseta.study.raw import read_recordings, write_recordings
from meseta.study.state import State, difference, words
from meseta.study.study import Study
from meseta.traces import Source, TraceSet
from meseta.work import Work

__all__ = ["read", "write_study"]

Paths = str | Path | Sequence[str | Path]


def _listed(paths: Paths) -> list[str | Path]:
    return [paths] if isinstance(paths, str | Path) else list(paths)


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
    named = _listed(paths)
    study = _only_study(named)
    if study is None:
        recipe, work = recipe or Recipe(), work or Work()
        return with_measures(intake.read(named, recipe, work), recipe.selection.measures, work)
    with Study.open(study, read_only=True) as opened:
        return opened.analysis(recipe, work).traces


def _only_study(named: Sequence[str | Path]) -> Path | None:
    studies = [path for path in named if is_study(path)]
    if studies and len(named) > 1:
        raise CallError("a study is read alone", str(studies[0]), "gather recordings into it with `meseta gather`")
    return Path(studies[0]) if studies else None


def write_study(
    path: str | Path, analysis: Analysis, work: Work | None = None, files: Paths = (), note: str = "study made"
) -> None:
    """Write a new study with the traces, recipe and decisions of an analysis; whole or not at all.

    Parameters
    ----------
    path : str or Path
        A file of that name is replaced.
    analysis : Analysis
    work : Work, optional
    files : str, Path or several
        What the traces were read from, as the user named it.  Recordings smaller than ``study.copy_below_megabyte``
        in all are copied, else linked; of a study the recordings and the history are taken over.
    note : str
        What the history says of the new study.
    """
    work, named = work or Work(), _listed(files)
    origin = _only_study(named)
    state = State(analysis.recipe, analysis.decisions)
    history = History.begun(note) if origin is None else _continued(origin, state, note)

    def fill(root: h5py.File) -> tuple[TraceSet, Sequence[str]]:
        traces = analysis.traces
        with ExitStack() as stack:
            if origin is not None:
                old = stack.enter_context(looking(origin))
                ours = {source.sha256 for source in traces.sources}  # it may have grown since the analysis was begun
                held = read_recordings(old, read_sources(old)[0])
                recordings = [one for one in held if one.source.sha256 in ours]
            else:
                recordings = _small(named, traces.sources, analysis.recipe, stack)
            if recordings:
                write_recordings(root, recordings, traces.sources, work)
        write_whole_traces(root, traces, analysis.recipe.key(FROM_RAW), work)
        write_outcomes(root, analysis)
        copied = {one.source.sha256 for one in recordings}
        return traces, [_kept(source, copied) for source in traces.sources]

    write_content(Path(path), state, lambda: history, fill)


def _kept(source: Source, copied: set[str]) -> str:
    if source.sha256 in copied:
        return "copied"
    return "none" if source.reader == "arrays" else "linked"


def _continued(origin: Path, state: State, note: str) -> History:
    """Return the history of a study with what was changed since."""
    with Study.open(origin, read_only=True) as study:
        history = study.history
        edits = difference(State(study.recipe, study.decisions), state)
    if edits:
        kind, text = words(edits)
        history = history.with_entry(history.change(kind, text, edits))
    return history.with_entry(history.mark("note", note))


def _small(named: Sequence[str | Path], sources: Sequence[Source], recipe: Recipe, stack: ExitStack) -> list[Recording]:
    """Return the recordings of the sources, open, where they are small enough to be copied."""
    if not named or sum(source.size_byte for source in sources) > recipe.study.copy_below_megabyte * 1e6:
        return []
    wanted = {source.sha256: source for source in sources}
    found: dict[str, Recording] = {}
    files = recordings_among(find_files(named)[0], recipe.intake)
    context = batch_context(recipe.intake, [file.path for file in files])
    for file in files:
        try:
            recording = stack.enter_context(open_recording(file.path, recipe, file.name, context))
        except InputError:
            continue  # the file was listed as bad when the traces were read
        if recording.source.sha256 in wanted:
            found[recording.source.sha256] = recording
    return [found[source.sha256] for source in sources if source.sha256 in found]

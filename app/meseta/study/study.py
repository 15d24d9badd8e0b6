"""Study: the one file that holds recordings, traces, recipe, decisions and history."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Self

import h5py

from meseta.analysis import Analysis
from meseta.errors import StudyError
from meseta.intake.files import FoundFile
from meseta.intake.reading import traces_from
from meseta.recipe import Recipe
from meseta.selection import with_measures
from meseta.study.chunks import BlockFile
from meseta.study.content import write_sources
from meseta.study.damage import find_losses, without_lost
from meseta.study.files import changing, clear_unfinished, is_study, looking, rewritten_of, swap, upgrade
from meseta.study.gathering import Added, Present, take_in, without_changing
from meseta.study.growing import TraceWriter
from meseta.study.loading import Content, load, write_content, write_whole_traces
from meseta.study.lock import Lock
from meseta.study.notebook import Notebook
from meseta.study.outcomes import Outcome, read_outcomes
from meseta.study.parts import FROM_RAW, versions, write_decisions, write_history, write_recipe, write_versions
from meseta.study.raw import read_recordings, write_recordings
from meseta.study.recordings import derived_key, opened_recordings, write_derived
from meseta.study.seen import Look, Seen, read_seen, seen_of
from meseta.study.state import State
from meseta.study.strict import reading
from meseta.traces import Source, TraceSet
from meseta.work import Work

__all__ = ["Study"]

Folders = str | Path | Sequence[str | Path]


class _NothingNewError(Exception):
    """Nothing of what was to be added is new; forgets what was begun."""


class Study(Notebook):
    """A study file, open.  A context manager.

    Every change is durable in the journal at once; :meth:`save` writes it into the file, :meth:`close` does not.
    """

    def __init__(
        self, path: Path, read_only: bool = False, take_over: bool = False, folders: Sequence[Path] = ()
    ) -> None:
        super().__init__()
        self.path, self._folders = path, list(folders)
        self._seen: Seen | None = None
        self.why_read_only = "opened for reading" if read_only else ""
        self._lock = None if read_only else self._locked(take_over)
        self.backup: Path | None = None
        """Where the copy of a study of an older schema is, where this opening migrated it."""
        try:
            if not self.read_only:
                clear_unfinished(path)
                self.backup = upgrade(path)
            self._load()
        except BaseException:
            self.close()
            raise

    # -- opening and closing ------------------------------------------------------------------------------------

    @classmethod
    def open(cls, path: str | Path, read_only: bool = False, take_over: bool = False, folders: Folders = ()) -> Study:
        """Open a study.

        Parameters
        ----------
        path : str or Path
        read_only : bool
            Change nothing, take no lock.
        take_over : bool
            Ignore the lock of another machine that is known to be gone.
        folders : str, Path or several
            Where linked recordings lie; no other place is looked at.

        Raises
        ------
        StudyError
            Where it is none, is damaged beyond use, or was written by a newer version.
        """
        path = Path(path)
        if not path.exists():
            raise StudyError("does not exist", str(path), "check the path")
        if not is_study(path):
            raise StudyError("is not a Meseta study", str(path), "make one with `meseta gather` or `meseta run`")
        given = [folders] if isinstance(folders, str | Path) else folders
        return cls(path, read_only, take_over, [Path(folder) for folder in given])

    @classmethod
    def create(cls, path: str | Path, files: Folders, recipe: Recipe | None = None, work: Work | None = None) -> Study:
        """Make a new study of recordings, and open it; refuses to replace a file.

        Parameters
        ----------
        path : str or Path
        files : str, Path or several
            Recordings, folders, patterns.
        recipe : Recipe, optional
            What is known of the files, and all other settings.
        work : Work, optional

        Raises
        ------
        CallError
            Where the file exists.
        InputError
            Where no recording can be read.
        """
        from meseta.study.arriving import folders_of
        from meseta.study.making import create_study

        named = [files] if isinstance(files, str | Path) else list(files)
        create_study(path, named, recipe, work)
        return cls.open(path, folders=folders_of(named))

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Let go of the study.  What was not saved stays in the journal and is offered on the next opening."""
        with self._guard:
            if self._lock is not None:
                self._lock.release()
            self.why_read_only = self.why_read_only or "closed"

    def _locked(self, take_over: bool) -> Lock | None:
        try:
            lock = Lock(self.path, take_over)
        except OSError as error:
            self.why_read_only = f"the folder cannot be written to ({error.strerror})"
            return None
        if lock.holder is not None:
            self.why_read_only = f"held by {lock.holder}"
            return None
        if not os.access(self.path, os.W_OK):
            lock.release()
            self.why_read_only = "the file may not be written to"
            return None
        return lock

    def _load(self) -> None:
        self._blocks = BlockFile(self.path)
        self._content: Content = load(self.path, self._blocks)
        self._checksums = {one.sha256 for one in self._content.sources}
        content, self.damage = self._content, self._content.damage
        self._saved, self._saved_entries = content.state, len(content.history.entries)
        self._derived: dict[str, TraceSet] = {} if content.traces is None else {content.recipe_key: content.traces}
        if content.damage and not self.read_only:
            self.why_read_only = "the file is damaged"
            if self._lock is not None:
                self._lock.release()
        self._begin(content.identity, content.state, content.history)

    # -- what it holds --------------------------------------------------------------------------------------------

    @property
    def sources(self) -> Mapping[Source, str]:
        """The recordings, and whether each is "copied", "linked" or not kept ("none")."""
        self._need("the list of recordings")
        return dict(zip(self._content.sources, self._content.kept, strict=True))

    @property
    def unknown(self) -> tuple[str, ...]:
        """Names in the file that this version does not know."""
        return self._content.unknown

    def results(self) -> dict[str, Outcome]:
        """Return the tables of the steps that were computed when the study was written, each with its key."""
        with looking(self.path) as root:
            return reading("the results", str(self.path), lambda: read_outcomes(root))

    def version_differences(self) -> list[str]:
        """Return, in words, which versions differ from those with which the study was saved last."""
        then, now = self._content.versions, versions()
        names = sorted({*then, *now})
        return [
            f"{name} {then.get(name, 'unknown')} then, {now.get(name, 'unknown')} now"
            for name in names
            if then.get(name) != now.get(name)
        ]

    def point_to(self, folder: str | Path) -> None:
        """Say where linked recordings lie; they are recognised by name and checksum."""
        self._folders.append(Path(folder))

    def traces(self, work: Work | None = None, recipe: Recipe | None = None) -> TraceSet:
        """Return the traces; their samples stay in the file and are read block by block.

        Where calibration or cutting have changed since, they are made of the recordings anew; by the study's own
        recipe they then take the place of the old ones in the file.

        Parameters
        ----------
        work : Work, optional
        recipe : Recipe, optional
            Another recipe than the study's own; such traces are kept in memory only.

        Raises
        ------
        StudyError
            Where a linked recording is needed and not found: say where with :meth:`point_to`.
        """
        with self._guard:
            wanted = recipe or self.recipe
            key = wanted.key(FROM_RAW)
            if key not in self._derived:
                if not self.read_only and wanted == self.recipe:
                    self.rewrite(work)
                else:
                    self._derived[key] = self._derive(wanted, work or Work())
            return self._derived[key]

    def _derive(self, recipe: Recipe, work: Work) -> TraceSet:
        self._need("the list of recordings")
        content = self._content
        with (
            looking(self.path) as root,
            opened_recordings(root, content.sources, content.kept, self._folders, recipe) as recordings,
        ):
            return traces_from(recordings, recipe, work)

    def analysis(self, recipe: Recipe | None = None, work: Work | None = None) -> Analysis:
        """Return the analysis of this study, by its own recipe or another one.

        Every sample is checked first: traces that have damaged ones are named in ``traces.notes["damage"]`` and left
        out by the selection.
        """
        work = work or Work()
        recipe = recipe or self.recipe
        traces = self.traces(work, recipe)
        traces = without_lost(traces, find_losses(traces, work))
        return Analysis(with_measures(traces, recipe.selection.measures, work), recipe, self.decisions)

    def check(self, work: Work | None = None) -> list[str]:
        """Read everything, and return what is damaged, in words; empty where all is whole."""
        found = [*self.damage]
        if self._content.traces is not None:
            found += [str(loss) for loss in find_losses(self._content.traces, work or Work())]
        return found + self._check_recordings(work or Work())

    def _check_recordings(self, work: Work) -> list[str]:
        found = []
        with looking(self.path) as root:
            try:
                recordings = read_recordings(root, self._content.sources)
            except (OSError, RuntimeError, ValueError, KeyError) as error:
                return [f"the copied recordings are damaged ({error})"]
            for recording in recordings:
                work.check()
                for channel in recording.channels:
                    try:
                        channel.samples.read(0, len(channel.samples))
                    except (OSError, RuntimeError, ValueError) as error:
                        found.append(f"recording '{recording.source.name}', '{channel.name}': damaged ({error})")
        return found

    # -- saving ---------------------------------------------------------------------------------------------------

    def save(self) -> None:
        """Write recipe, decisions and history into the file, all or nothing; quick whatever the size.

        Raises
        ------
        StudyError
            Where there is no room: the last saved state and the journal are whole then.
        """
        with self._guard:
            self._need_writable()
            if len(self._history.entries) == self._saved_entries:
                return
            with changing(self.path) as root:
                self._write_state(root)
            self._are_saved()

    def _write_state(self, root: h5py.File) -> None:
        if self._state.recipe != self._saved.recipe:
            write_recipe(root, self._state.recipe)
        if self._state.decisions != self._saved.decisions:
            write_decisions(root, self._state.decisions)
        write_history(root, self._history)
        write_versions(root)

    def _are_saved(self) -> None:
        self._saved, self._saved_entries = self._state, len(self._history.entries)
        self._journal.clear()

    def rewrite(self, work: Work | None = None) -> None:
        """Write the whole study anew and swap it in: room that earlier saves left behind is given back.

        Traces are made of the recordings anew where calibration or cutting have changed.
        """
        with self._guard:
            self._need_writable()
            work, beside, content, state = work or Work(), rewritten_of(self.path), self._content, self._state
            key = state.recipe.key(FROM_RAW)
            with looking(self.path) as old:

                def fill(root: h5py.File) -> tuple[TraceSet, Sequence[str]]:
                    seen_of(old).copy(fresh=True).write(root)
                    copied = read_recordings(old, content.sources)
                    if copied:
                        write_recordings(root, copied, content.sources, work)
                    if key in self._derived:
                        write_whole_traces(root, self._derived[key], key, work)
                        return self._derived[key], content.kept
                    return self._write_derived(old, root, state, work), content.kept

                write_content(beside, state, lambda: self._history, fill, content.identity)
            self._swap(beside)

    def _write_derived(self, old: h5py.File, root: h5py.File, state: State, work: Work) -> TraceSet:
        content, recipe = self._content, state.recipe
        with opened_recordings(old, content.sources, content.kept, self._folders, recipe) as recordings:
            writer = TraceWriter(root, work, sum(one.samples for one in recordings))
            write_derived(writer, recordings, recipe, work)
        return writer.finish(derived_key(content.sources, recipe), recipe.key(FROM_RAW))

    def _swap(self, beside: Path) -> None:
        if os.name == "nt":
            self._blocks.close()  # there an open file cannot be replaced; traces handed out before end here
        swap(beside, self.path)
        self._are_saved()
        self._load()

    def knows(self, path: Path, look: Look) -> bool:
        """Return whether a file is one that was read, and still looks as it did then."""
        with self._guard:
            if self._seen is None:
                self._seen = read_seen(self.path)
            return self._seen.checksum(path, look) in self._checksums

    def add(self, files: Sequence[FoundFile], work: Work | None = None) -> Added:
        """Take in recordings that the study does not have yet, as one entry of the history, saved at once.

        Returns
        -------
        Added
            What was added, what was there already, and files that could not be read.

        Raises
        ------
        StudyError
            Where the study cannot be changed or written; it is then as it was.
        """
        with self._guard:
            self._need_writable()
            work = work or Work()
            added = without_changing(files, lambda left: self._add(left, work))
            if added.sources:
                self._load()
                if self.recipe.calibration.offset_from_floor:  # it looks at all recordings together
                    self._derived.clear()
                    self.rewrite(work)
            return added

    def _add(self, files: Sequence[FoundFile], work: Work) -> Added:
        if self._content.recipe_key != self.recipe.key(FROM_RAW):
            self.rewrite(work)  # those in the file, to which others are added, were made by other settings
        traces, content, added = self.traces(work), self._content, Added()
        history = self._history
        seen = (self._seen or read_seen(self.path)).copy()
        with contextlib.suppress(_NothingNewError), changing(self.path) as root:
            writer = TraceWriter(root, work, 0, traces)
            present = Present(content.sources, self.decisions.removed_sources, seen)
            added = take_in(root, writer, files, self.recipe, present, work)
            if not added.sources:
                raise _NothingNewError
            sources = (*content.sources, *added.sources)
            writer.finish(derived_key(sources, self.recipe), self.recipe.key(FROM_RAW))
            write_sources(root, sources, (*content.kept, *added.kept))
            seen.write(root)
            history = history.with_entry(history.change("import", added.text(), added.edits()))
            write_history(root, history)
            write_recipe(root, self._state.recipe)
            write_decisions(root, self._state.decisions)
            write_versions(root)
        if added.sources:
            self._history = history
            self._are_saved()
        elif seen.unwritten:
            with changing(self.path) as root:
                seen.write(root)
        self._seen = seen
        return added

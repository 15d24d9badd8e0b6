"""Study: the one file that holds recordings, traces, recipe, decisions and history."""

from __future__ import annotations

import os
import threading
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Self

from meseta.analysis import Analysis
from meseta.errors import CallError, StudyError
from meseta.intake.recording import Recording
from meseta.recipe import Recipe
from meseta.selection import Decisions, RemovedRange
from meseta.study.chunks import BlockFile
from meseta.study.damage import find_losses, without_lost
from meseta.study.files import changing, clear_unfinished, is_study, looking, rewritten_of, swap, upgrade
from meseta.study.history import Entry, History
from meseta.study.journal import Journal, read_journal
from meseta.study.loading import load, write_content
from meseta.study.lock import Lock
from meseta.study.parts import FROM_RAW, write_decisions, write_history, write_recipe, write_versions
from meseta.study.raw import read_recordings
from meseta.study.state import State, applied, difference, words
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["Study", "write_study"]


def write_study(
    path: str | Path,
    analysis: Analysis,
    work: Work | None = None,
    recordings: Sequence[Recording] = (),
) -> None:
    """Write a new study with the traces, recipe and decisions of an analysis; whole or not at all.

    Parameters
    ----------
    path : str or Path
        A file of that name is replaced.
    analysis : Analysis
    work : Work, optional
    recordings : sequence of Recording
        Open recordings to keep as recorded, in the order of ``analysis.traces.sources``; those left out are linked.
    """
    state = State(analysis.recipe, analysis.decisions)
    history = History.begun("study made")
    write_content(Path(path), analysis.traces, state, history, recordings, work or Work())


class Study:
    """A study file, open.  A context manager; :meth:`close` saves nothing by itself, the journal keeps every change.

    Attributes
    ----------
    path : Path
    read_only : bool
        Whether changes are refused; ``why_read_only`` says why.
    recovered : tuple of Entry
        Changes that an earlier session made and did not save; they are in force, and :meth:`discard_recovered` takes
        them back.
    damage : tuple of str
        What was found damaged on opening, part by part; the rest is usable.
    """

    def __init__(self, path: Path, read_only: bool = False, take_over: bool = False) -> None:
        self.path = path
        self.why_read_only = "opened for reading" if read_only else ""
        self._guard = threading.RLock()
        self._lock = None if read_only else self._locked(take_over)
        try:
            if not self.read_only:
                clear_unfinished(path)
            self.backup = None if self.read_only else upgrade(path)
            self._open()
        except BaseException:
            self.close()
            raise

    # -- opening and closing ------------------------------------------------------------------------------------

    @classmethod
    def open(cls, path: str | Path, read_only: bool = False, take_over: bool = False) -> Study:
        """Open a study.

        Parameters
        ----------
        path : str or Path
        read_only : bool
            Change nothing, take no lock.
        take_over : bool
            Ignore the lock of another machine that is known to be gone.

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
        return cls(path, read_only, take_over)

    @classmethod
    def create(cls, path: str | Path, analysis: Analysis, work: Work | None = None) -> Study:
        """Write a new study from an analysis and open it; refuses to replace a file."""
        if Path(path).exists():
            raise CallError("exists already", str(path), "open it, or choose another name")
        write_study(path, analysis, work)
        return cls.open(path)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @property
    def read_only(self) -> bool:
        """Whether changes are refused."""
        return bool(self.why_read_only)

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
        return lock

    def _open(self) -> None:
        self._blocks = BlockFile(self.path)
        content = load(self.path, self._blocks)
        self._content, self.damage = content, content.damage
        self._saved_entries = len(content.history.entries)
        self._saved, self._history = content.state, content.history
        self._state = content.state
        self._journal = Journal(self.path, content.identity)
        self._derived: dict[str, TraceSet] = {} if content.traces is None else {content.recipe_key: content.traces}
        if content.damage and not self.read_only:
            self.why_read_only = "the file is damaged"
            if self._lock is not None:
                self._lock.release()
        self.recovered = self._recover()

    def _recover(self) -> tuple[Entry, ...]:
        """Apply the entries that the journal has beyond the saved ones."""
        found = read_journal(self.path, self._content.identity)
        damage = ["the journal of another study lies beside it"] if found.foreign else []
        damage += [f"the journal: {found.damage}"] if found.damage else []
        fresh = [entry for entry in found.entries if entry.number >= self._saved_entries]
        replayed: list[Entry] = []
        for entry in fresh:
            try:
                history = self._history.with_entry(entry)
            except ValueError as error:
                damage.append(f"the journal: {error}")
                break
            changed = applied(self._state, entry.edits)
            self._state = changed if entry.edits else self._history.moved(self._state, entry.state)
            self._history = history
            replayed.append(entry)
        self.damage = (*self.damage, *damage)
        if not self.read_only:
            self._tidy_journal(bool(damage), found.whole_byte, replayed)
        return tuple(replayed)

    def _tidy_journal(self, damaged: bool, whole_byte: int, replayed: Sequence[Entry]) -> None:
        path = self._journal.path
        if not path.exists():
            return
        if damaged:
            self._journal.set_aside()
            if replayed:
                self._journal.append(replayed)
        elif path.stat().st_size != whole_byte:
            self._journal.cut(whole_byte)

    # -- what it holds --------------------------------------------------------------------------------------------

    @property
    def recipe(self) -> Recipe:
        """The recipe in force."""
        self._need("the recipe")
        return self._state.recipe

    @property
    def decisions(self) -> Decisions:
        """What was decided by hand."""
        self._need("the decisions", "the journal")
        return self._state.decisions

    @property
    def history(self) -> History:
        """Every entry."""
        self._need("the history")
        return self._history

    @property
    def versions(self) -> Mapping[str, str]:
        """Versions of Meseta and of the libraries with which the study was saved last."""
        return self._content.versions

    def _need(self, *parts: str) -> None:
        """Raise the damage of a part before anybody takes what is left of it for the whole."""
        for statement in self.damage:
            if statement.startswith(parts):
                raise StudyError(statement, str(self.path), "use a copy of the study")

    def traces(self, work: Work | None = None) -> TraceSet:
        """Return the traces; their samples stay in the file and are read block by block."""
        key = self.recipe.key(FROM_RAW)
        if key in self._derived:
            return self._derived[key]
        self._need("the traces")
        raise StudyError("the traces were made with other settings", str(self.path), "")

    def analysis(self, recipe: Recipe | None = None, work: Work | None = None) -> Analysis:
        """Return the analysis of this study, by its own recipe or another one.

        Every sample is checked first: traces that have damaged ones are named in ``traces.notes["damage"]`` and left
        out by the selection.
        """
        work = work or Work()
        traces = self.traces(work)
        return Analysis(without_lost(traces, find_losses(traces, work)), recipe or self.recipe, self.decisions)

    def check(self, work: Work | None = None) -> list[str]:
        """Read everything, and return what is damaged, in words; empty where all is whole."""
        losses = find_losses(self.traces(work), work or Work())
        return [*self.damage, *(str(loss) for loss in losses)]

    # -- changes --------------------------------------------------------------------------------------------------

    def change(
        self, *, recipe: Recipe | None = None, decisions: Decisions | None = None, text: str = ""
    ) -> Entry | None:
        """Put another recipe or other decisions in force, as one entry of the history.

        The entry is durable in the journal before this returns.

        Parameters
        ----------
        recipe : Recipe, optional
        decisions : Decisions, optional
        text : str
            What was done, in the user's words; made from the change where empty.

        Returns
        -------
        Entry or None
            None where nothing changes.

        Raises
        ------
        StudyError
            Where the study cannot be changed, or the change could not be kept (nothing has changed then).
        """
        with self._guard:
            after = State(recipe or self.recipe, decisions or self.decisions)
            edits = difference(self._state, after)
            if not edits:
                return None
            kind, said = words(edits)
            return self._enter(self._history.change(kind, text or said, edits), after)

    def keep(self, identities: Iterable[str], reason: str = "") -> Entry | None:
        """Keep traces whatever the rules say."""
        return self.change(decisions=self.decisions.with_verdict(identities, True, reason))

    def reject(self, identities: Iterable[str], reason: str = "") -> Entry | None:
        """Reject traces whatever the rules say."""
        return self.change(decisions=self.decisions.with_verdict(identities, False, reason))

    def remove(self, *parts: str | RemovedRange) -> Entry | None:
        """Take recordings (by SHA-256) or ranges out of the study, in one action; :meth:`restore` brings them back."""
        return self.change(decisions=self.decisions.with_removed(*parts))

    def restore(self, *parts: str | RemovedRange) -> Entry | None:
        """Bring removed recordings or ranges back."""
        return self.change(decisions=self.decisions.with_restored(*parts))

    def undo(self) -> Entry | None:
        """Go back to the state before; None where there is none."""
        target = self.history.undone()
        return None if target is None else self._move("undo", target)

    def redo(self) -> Entry | None:
        """Go forward to the state that was left last; None where there is none."""
        target = self.history.redone()
        return None if target is None else self._move("redo", target)

    def return_to(self, target: str | int) -> Entry | None:
        """Go to a named state, or to the state after an entry."""
        return self._move("return", self.history.find(target))

    def name(self, name: str) -> Entry:
        """Name the present state."""
        return self._enter(self.history.mark("name", name), self._state)

    def note(self, text: str) -> Entry:
        """Write a note into the history."""
        return self._enter(self.history.mark("note", text), self._state)

    def discard_recovered(self) -> Entry | None:
        """Return to the state of the last save, leaving what was recovered in the history."""
        if not self.recovered:
            return None
        return self._move("return", self.recovered[0].parent)

    def _move(self, kind: str, target: int) -> Entry | None:
        with self._guard:
            if target == self._history.state:
                return None
            shown = target if kind != "undo" else self._history.state
            entry = self._history.move(kind, f"#{shown} {self._history.entries[shown].text}", target)
            return self._enter(entry, self._history.moved(self._state, target))

    def _enter(self, entry: Entry, after: State) -> Entry:
        with self._guard:
            self._need_writable()
            history = self._history.with_entry(entry)
            self._journal.append([entry])
            self._history, self._state = history, after
            return entry

    def _need_writable(self) -> None:
        if self.read_only:
            raise StudyError(
                f"cannot be changed: {self.why_read_only}", str(self.path), "see who holds it, or use a copy"
            )

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
                if self._state.recipe != self._saved.recipe:
                    write_recipe(root, self._state.recipe)
                if self._state.decisions != self._saved.decisions:
                    write_decisions(root, self._state.decisions)
                write_history(root, self._history)
                write_versions(root)
            self._are_saved()

    def _are_saved(self) -> None:
        self._saved, self._saved_entries = self._state, len(self._history.entries)
        self._journal.clear()

    def rewrite(self, work: Work | None = None, traces: TraceSet | None = None) -> None:
        """Write the whole study anew and swap it in: room that saves left behind is given back.

        Parameters
        ----------
        work : Work, optional
        traces : TraceSet, optional
            Traces to put in the place of the present ones (made with other settings).
        """
        with self._guard:
            self._need_writable()
            work = work or Work()
            chosen = self.traces(work) if traces is None else traces
            beside = rewritten_of(self.path)
            with looking(self.path) as root:
                recordings = read_recordings(root, self._content.sources)
                write_content(beside, chosen, self._state, self._history, recordings, work, self._content.identity)
            if os.name == "nt":
                self._blocks.close()  # there an open file cannot be replaced; traces handed out before end here
            swap(beside, self.path)
            self._are_saved()
            self._open()

"""Recipe, decisions and history of an open study: every change an entry, durable before it is in force."""

from __future__ import annotations

import threading
from collections.abc import Iterable, Sequence
from pathlib import Path

from meseta.errors import StudyError
from meseta.recipe import Recipe
from meseta.selection import Decisions, RemovedRange
from meseta.study.history import Entry, History
from meseta.study.journal import Journal, read_journal
from meseta.study.state import State, applied, difference, words

__all__ = ["Notebook"]


class Notebook:
    """The part of a study that changes: :class:`~meseta.study.Study` is one with a file.

    Attributes
    ----------
    path : Path
    why_read_only : str
        Why changes are refused; empty where they are not.
    damage : tuple of str
        What was found damaged on opening, part by part; the rest is usable.
    recovered : tuple of Entry
        Changes that an earlier session made and did not save; they are in force, and :meth:`discard_recovered` takes
        them back.
    """

    path: Path
    why_read_only: str = ""
    damage: tuple[str, ...] = ()
    recovered: tuple[Entry, ...] = ()

    def __init__(self) -> None:
        self._guard = threading.RLock()
        self._state, self._history = State(), History.begun("")
        self._journal: Journal

    # -- what it holds --------------------------------------------------------------------------------------------

    @property
    def read_only(self) -> bool:
        """Whether changes are refused."""
        return bool(self.why_read_only)

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

    def _need(self, *parts: str) -> None:
        """Raise the damage of a part before anybody takes what is left of it for the whole."""
        for statement in self.damage:
            if statement.startswith(parts):
                raise StudyError(statement, str(self.path), "use a copy of the study")

    def _need_writable(self) -> None:
        if self.read_only:
            raise StudyError(
                f"cannot be changed: {self.why_read_only}", str(self.path), "see who holds it, or use a copy"
            )

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
            after = State(recipe or self.recipe, self.decisions if decisions is None else decisions)
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

    # -- history --------------------------------------------------------------------------------------------------

    def undo(self) -> Entry | None:
        """Go back to the state before; None where there is none."""
        with self._guard:
            target = self.history.undone()
            return None if target is None else self._move("undo", target, self._history.state)

    def redo(self) -> Entry | None:
        """Go forward to the state that was left last; None where there is none."""
        with self._guard:
            target = self.history.redone()
            return None if target is None else self._move("redo", target, target)

    def return_to(self, target: str | int) -> Entry | None:
        """Go to a named state, or to the state after an entry."""
        with self._guard:
            state = self.history.find(target)
            return self._move("return", state, state)

    def name(self, name: str) -> Entry:
        """Name the present state."""
        with self._guard:
            return self._enter(self.history.mark("name", name), self._state)

    def note(self, text: str) -> Entry:
        """Write a note into the history."""
        with self._guard:
            return self._enter(self.history.mark("note", text), self._state)

    def discard_recovered(self) -> Entry | None:
        """Return to the state of the last save, leaving what was recovered in the history."""
        return self.return_to(self.recovered[0].parent) if self.recovered else None

    def _move(self, kind: str, target: int, shown: int) -> Entry | None:
        if target == self._history.state:
            return None
        entry = self._history.move(kind, f"#{shown} {self._history.entries[shown].text}", target)
        return self._enter(entry, self._history.moved(self._state, target))

    def _enter(self, entry: Entry, after: State) -> Entry:
        """Make an entry durable, then put it in force."""
        self._need_writable()
        history = self._history.with_entry(entry)
        self._journal.append([entry])
        self._history, self._state = history, after
        return entry

    # -- recovery -------------------------------------------------------------------------------------------------

    def _begin(self, identity: str, state: State, history: History) -> None:
        """Begin with what is saved, and apply the entries that the journal has beyond it."""
        self._state, self._history = state, history
        self._journal = Journal(self.path, identity)
        found = read_journal(self.path, identity)
        damage = ["the journal of another study lies beside this one"] if found.foreign else []
        damage += [f"the journal: {found.damage}"] if found.damage else []
        replayed: list[Entry] = []
        for entry in found.entries:
            if entry.number < len(history.entries):
                continue  # saved, but the journal was not removed any more
            try:
                follows = self._history.with_entry(entry)
            except ValueError as error:
                damage.append(f"the journal: {error}")
                break
            changed = applied(self._state, entry.edits)
            self._state = changed if entry.edits else self._history.moved(self._state, entry.state)
            self._history = follows
            replayed.append(entry)
        self.recovered, self.damage = tuple(replayed), (*self.damage, *damage)
        if not self.read_only:
            self._tidy_journal(bool(damage), found.whole_byte, replayed)

    def _tidy_journal(self, damaged: bool, whole_byte: int, replayed: Sequence[Entry]) -> None:
        path = self._journal.path
        if not path.exists():
            return
        if damaged:
            self._journal.set_aside()
            if replayed:
                self._journal.append(replayed)
        elif not replayed:
            self._journal.clear()
        elif path.stat().st_size != whole_byte:
            self._journal.cut(whole_byte)

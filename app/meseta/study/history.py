"""The history of a study: every change an entry that can be undone, redone, named and returned to.

The history only grows.  A change makes a new state whose parent is the state before; undo, redo and return move to
a state that exists and are entries as well, so that nothing that was ever done is lost.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

from meseta import __version__
from meseta.errors import CallError, nearest
from meseta.study.state import Edit, State, applied

__all__ = ["Entry", "History"]


@dataclass(frozen=True)
class Entry:
    """One entry.

    Attributes
    ----------
    number : int
        Counts from 0; entry 0 is the beginning.
    when : str
        Date and time in UTC, ISO 8601.
    version : str
        Version of Meseta.
    kind : str
        "begin", "import", "calibration", "recipe", "decision" change something; "undo", "redo", "return" move to an
        earlier or later state; "name" names the present one; "note" only says something.
    text : str
        What was done; for "name" the name.
    parent : int
        State before the entry, by the number of the entry that made it.
    state : int
        State after the entry; its own number where the entry changed something.
    edits : tuple of Edit
        (path, old, new); empty for moves.
    """

    number: int
    when: str
    version: str
    kind: str
    text: str
    parent: int
    state: int
    edits: tuple[Edit, ...] = field(default=(), repr=False)

    def plain(self) -> dict[str, Any]:
        """Return the entry as plain values."""
        return {**self.head(), "edits": [[list(path), old, new] for path, old, new in self.edits]}

    def head(self) -> dict[str, Any]:
        """Return all but the edits."""
        names = ("number", "when", "version", "kind", "text", "parent", "state")
        return {name: getattr(self, name) for name in names}

    @classmethod
    def parse(cls, plain: dict[str, Any]) -> Entry:
        """Return the entry that :meth:`plain` wrote.

        Raises
        ------
        ValueError, KeyError, TypeError
            Where it is none.
        """
        edits = tuple((tuple(str(part) for part in path), old, new) for path, old, new in plain["edits"])
        return cls(
            *(int(plain["number"]), str(plain["when"]), str(plain["version"]), str(plain["kind"])),
            *(str(plain["text"]), int(plain["parent"]), int(plain["state"]), edits),
        )


@dataclass(frozen=True)
class History:
    """All entries.  Frozen: :meth:`with_entry` makes a new one."""

    entries: tuple[Entry, ...]

    @classmethod
    def begun(cls, text: str) -> History:
        """Return a history with its first entry."""
        return cls((_stamped(0, "begin", text, 0, 0, ()),))

    @property
    def state(self) -> int:
        """Number of the present state."""
        return self.entries[-1].state

    def with_entry(self, entry: Entry) -> History:
        """Return the history with the next entry.

        Raises
        ------
        ValueError
            Where the entry does not follow.
        """
        fits = entry.number == len(self.entries) and entry.parent == self.state and 0 <= entry.state <= entry.number
        if not fits:
            raise ValueError(f"entry {entry.number} does not follow entry {len(self.entries) - 1}")
        return History((*self.entries, entry))

    def change(self, kind: str, text: str, edits: Sequence[Edit]) -> Entry:
        """Return the next entry: a change."""
        number = len(self.entries)
        return _stamped(number, kind, text, self.state, number, tuple(edits))

    def mark(self, kind: str, text: str) -> Entry:
        """Return the next entry: a name for the present state, or a note."""
        return _stamped(len(self.entries), kind, text, self.state, self.state, ())

    def move(self, kind: str, text: str, state: int) -> Entry:
        """Return the next entry: a move to another state."""
        return _stamped(len(self.entries), kind, text, self.state, state, ())

    # -- finding states ---------------------------------------------------------------------------------------

    def undone(self) -> int | None:
        """Return the state before the present one; None at the beginning."""
        return None if self.state == 0 else self.entries[self.state].parent

    def redone(self) -> int | None:
        """Return the state after the present one that was left last; None where there is none."""
        for entry in reversed(self.entries):
            for state in (entry.state, entry.parent):
                if state != self.state and self.entries[state].parent == self.state and state != 0:
                    return state
        return None

    def names(self) -> dict[str, int]:
        """Return the named states; where a name was given twice the later one counts."""
        return {entry.text: entry.state for entry in self.entries if entry.kind == "name"}

    def find(self, target: str | int) -> int:
        """Return the number of a state, by its name or the number of an entry.

        Raises
        ------
        CallError
            Where there is none.
        """
        if isinstance(target, int):
            if 0 <= target < len(self.entries):
                return self.entries[target].state
            raise CallError(f"there is no entry {target}", "history", f"entries are 0 to {len(self.entries) - 1}")
        names = self.names()
        if target not in names:
            raise CallError(f"no state is named '{target}'", "history", nearest(target, names))
        return names[target]

    def moved(self, present: State, target: int) -> State:
        """Return the state ``target``, found from the present one by taking back and applying changes."""
        back, forth = self._way(self.state, target)
        for number in back:
            present = applied(present, self.entries[number].edits, backwards=True)
        for number in forth:
            present = applied(present, self.entries[number].edits)
        return present

    def _way(self, start: int, target: int) -> tuple[list[int], list[int]]:
        """Return the changes to take back, and those to apply, from one state to another."""
        above = {number: place for place, number in enumerate(self._line(start))}
        forth: list[int] = []
        state = target
        while state not in above:
            forth.append(state)
            state = self.entries[state].parent
        return list(above)[: above[state]], forth[::-1]

    def _line(self, state: int) -> list[int]:
        line = [state]
        while state != 0:
            state = self.entries[state].parent
            line.append(state)
        return line

    # -- as text ----------------------------------------------------------------------------------------------

    def text(self) -> str:
        """Return the history as a laboratory notebook reads: one line an entry, by day."""
        lines: list[str] = []
        day = ""
        for entry in self.entries:
            date, _, time = entry.when.partition("T")
            if date != day:
                lines += ["", date] if lines else [date]
                day = date
            lines.append(f"  {time[:8]}  #{entry.number:<4} {_TITLES.get(entry.kind, entry.kind)}: {entry.text}")
        return "\n".join(lines) + "\n"


_TITLES = {
    "begin": "Begun",
    "import": "Import",
    "calibration": "Calibration",
    "recipe": "Recipe",
    "decision": "Decision",
    "undo": "Undone",
    "redo": "Redone",
    "return": "Returned",
    "name": "Named",
    "note": "Note",
}


def _stamped(number: int, kind: str, text: str, parent: int, state: int, edits: tuple[Edit, ...]) -> Entry:
    when = datetime.now(UTC).isoformat(timespec="milliseconds")
    return Entry(number, when, __version__, kind, text, parent, state, edits)


def parse_entries(lines: Iterable[str]) -> list[Entry]:
    """Return entries from lines of JSON."""
    return [Entry.parse(json.loads(line)) for line in lines]

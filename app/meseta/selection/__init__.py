"""Rules, decisions by hand, groups."""

from meseta.selection.results import Decisions, Event, Group, Selection, SelectionTable, Verdict

__all__ = ["Decisions", "Event", "Group", "Selection", "SelectionTable", "Verdict"]

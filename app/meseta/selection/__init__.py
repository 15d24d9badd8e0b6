"""Rules, decisions by hand, groups."""

from meseta.selection.results import Decisions, Event, Group, RemovedRange, Selection, SelectionTable, Verdict
from meseta.selection.rules import check_rules, parse_rules, select

__all__ = [
    "Decisions",
    "Event",
    "Group",
    "RemovedRange",
    "Selection",
    "SelectionTable",
    "Verdict",
    "check_rules",
    "parse_rules",
    "select",
]

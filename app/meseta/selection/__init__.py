"""Rules, decisions by hand, groups."""

from meseta.selection.conditions import Rule
from meseta.selection.grammar import parse_rule
from meseta.selection.plugins import installed_measures, with_measures
from meseta.selection.results import Decisions, Event, Group, RemovedRange, Selection, SelectionTable, Verdict
from meseta.selection.rules import check_rules, parse_rules, select
from meseta.selection.vocabulary import QUANTITIES
from meseta.selection.wording import rule_sentence, rule_text

__all__ = [
    "QUANTITIES",
    "Decisions",
    "Event",
    "Group",
    "RemovedRange",
    "Rule",
    "Selection",
    "SelectionTable",
    "Verdict",
    "check_rules",
    "installed_measures",
    "parse_rule",
    "parse_rules",
    "rule_sentence",
    "rule_text",
    "select",
    "with_measures",
]

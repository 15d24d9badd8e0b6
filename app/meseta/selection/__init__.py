"""Rules, decisions by hand, groups.

The names below are loaded on first use: decisions are plain data, and who holds them need not wait for the engine.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

_PUBLIC = {
    "QUANTITIES": "vocabulary",
    "Decisions": "decisions",
    "Event": "decisions",
    "Group": "decisions",
    "LengthSeries": "decisions",
    "RemovedRange": "decisions",
    "Rule": "conditions",
    "Selection": "results",
    "SelectionTable": "results",
    "Verdict": "decisions",
    "check_rules": "rules",
    "installed_measures": "plugins",
    "parse_rule": "grammar",
    "parse_rules": "rules",
    "rule_sentence": "wording",
    "rule_text": "wording",
    "select": "rules",
    "with_measures": "plugins",
}

__all__ = [
    "QUANTITIES",
    "Decisions",
    "Event",
    "Group",
    "LengthSeries",
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

if TYPE_CHECKING:
    from meseta.selection.conditions import Rule
    from meseta.selection.decisions import Decisions, Event, Group, LengthSeries, RemovedRange, Verdict
    from meseta.selection.grammar import parse_rule
    from meseta.selection.plugins import installed_measures, with_measures
    from meseta.selection.results import Selection, SelectionTable
    from meseta.selection.rules import check_rules, parse_rules, select
    from meseta.selection.vocabulary import QUANTITIES
    from meseta.selection.wording import rule_sentence, rule_text


def __getattr__(name: str) -> Any:
    if name in _PUBLIC:
        value = getattr(importlib.import_module(f"meseta.selection.{_PUBLIC[name]}"), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'meseta.selection' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted({*globals(), *_PUBLIC})

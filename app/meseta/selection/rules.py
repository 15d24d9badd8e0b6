"""Selection by stated rules: which traces take part, which rule dropped each other one, and what each rule took."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.recipe.selection import SelectionSettings
from meseta.segmentation import PlateauTable, TraceMeasures
from meseta.selection.conditions import Rule
from meseta.selection.decisions import Decisions
from meseta.selection.evaluation import Evaluator
from meseta.selection.facts import Facts
from meseta.selection.grammar import parse_rule
from meseta.selection.results import Selection, SelectionTable
from meseta.traces import TraceSet

__all__ = ["check_rules", "parse_rules", "select"]

Truths = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class _Drop:
    """One reason to drop traces."""

    title: str
    dropped: Truths
    reasons: npt.NDArray[np.str_] | str


def parse_rules(rules: Sequence[str]) -> list[tuple[str, Rule]]:
    """Return the rules with their texts, understood; blank ones are left out.

    Raises
    ------
    RecipeError
        Naming the rule and pointing at the word.
    """
    return [(text.strip(), parse_rule(text)) for text in rules if text.strip()]


def check_rules(traces: TraceSet, settings: SelectionSettings, decisions: Decisions | None = None) -> None:
    """Raise a RecipeError before any work where a rule cannot be understood for these traces.

    Unlike :func:`parse_rules` this knows the columns of the trace table, so that it finds mistyped names as well.
    """
    empty = traces.take(np.empty(0, np.int64))
    nothing = TraceMeasures.concatenate([_no_measures()])
    facts = Facts(empty, nothing, PlateauTable.empty(), decisions or Decisions())
    for text, rule in parse_rules(settings.rules):
        Evaluator(facts, text).verdicts(rule.condition)


def select(
    traces: TraceSet,
    settings: SelectionSettings,
    measures: TraceMeasures,
    plateaus: PlateauTable,
    decisions: Decisions,
    direction: str,
) -> Selection:
    """Apply direction, decisions by hand and the rules, in this order.

    Parameters
    ----------
    traces : TraceSet
    settings : SelectionSettings
        The rules, in the order in which reasons are named.
    measures : TraceMeasures
        One row a trace.
    plateaus : PlateauTable
    decisions : Decisions
        Verdicts by hand win over the rules; removed recordings and ranges win over both.
    direction : "opening" or "closing"
        Traces of the other direction never take part.

    Returns
    -------
    Selection

    Raises
    ------
    RecipeError
        Where a rule cannot be understood; points at the word and proposes the nearest known one.
    """
    facts = Facts(traces, measures, plateaus, decisions)
    drops = [_other_direction(traces, direction), *_damaged(traces), *_removed(traces, decisions)]
    rejected, kept_by_hand = _verdicts(facts)
    if rejected is not None:
        drops.append(rejected)
    drops += [_drop(facts, text, rule, kept_by_hand) for text, rule in parse_rules(settings.rules) if rule.active]
    reason, table = _in_sequence(drops, traces.traces)
    unmatched = decisions.identities() - facts.row_of.keys() if decisions.identities() else ()
    return Selection(reason == "", reason, _group_names(facts), table, tuple(sorted(unmatched)))


def _other_direction(traces: TraceSet, direction: str) -> _Drop:
    has = np.asarray(traces.table["direction"])
    names = np.char.add(has.astype(np.str_), " trace") if len(has) else has
    return _Drop(f"direction is {direction}", has != direction, names)


def _damaged(traces: TraceSet) -> list[_Drop]:
    """Return the traces of which a study has lost samples."""
    damaged = np.asarray(traces.table.get("damaged", False), np.bool_)
    title = "samples damaged in the study file"
    return [_Drop(title, damaged, title)] if damaged.any() else []


def _removed(traces: TraceSet, decisions: Decisions) -> list[_Drop]:
    """Return what was taken out of the record: whole recordings first, then ranges."""
    source = np.asarray(traces.table["source"])
    drops = []
    gone = np.array([one.sha256 in decisions.removed_sources for one in traces.sources], np.bool_)
    if gone.any():
        names = np.array([f"recording removed: {one.name}" for one in traces.sources])
        drops.append(_Drop("recording removed", gone[source], names[source]))
    for part in decisions.removed_ranges:
        column = "record_start" if part.unit == "sample" else "time_second"
        place = np.asarray(traces.table[column], np.float64)
        here = np.array([part.sha256 in ("", one.sha256) for one in traces.sources], np.bool_)
        title = f"range removed: {part.reason or f'{part.start:g} to {part.stop:g} {part.unit}s'}"
        drops.append(_Drop(title, here[source] & (place >= part.start) & (place < part.stop), title))
    return drops


def _verdicts(facts: Facts) -> tuple[_Drop | None, Truths]:
    """Return the traces rejected by hand, and which are kept by hand whatever the rules say."""
    kept = np.zeros(facts.traces.traces, np.bool_)
    verdicts = facts.decisions.verdicts
    if not verdicts:
        return None, kept
    dropped, reasons = kept.copy(), np.full(facts.traces.traces, "", object)
    for identity, verdict in verdicts.items():
        row = facts.row_of.get(identity)
        if row is None:
            continue
        (kept if verdict.keep else dropped)[row] = True
        reasons[row] = f"rejected by hand: {verdict.reason}" if verdict.reason else "rejected by hand"
    return _Drop("rejected by hand", dropped, reasons.astype(np.str_)), kept


def _drop(facts: Facts, text: str, rule: Rule, kept_by_hand: Truths) -> _Drop:
    title = rule.label or text
    return _Drop(title, ~Evaluator(facts, text).verdicts(rule.condition).true & ~kept_by_hand, title)


def _in_sequence(drops: Sequence[_Drop], traces: int) -> tuple[npt.NDArray[np.str_], SelectionTable]:
    """Return the first reason of every trace, and what each rule took alone and in sequence.

    "Alone" counts among the traces of the right direction: the direction comes before every question.
    """
    reason, left = np.full(traces, "", object), np.ones(traces, np.bool_)
    alone, in_sequence, remaining = [], [], []
    candidates = ~drops[0].dropped
    for place, drop in enumerate(drops):
        first = drop.dropped & left
        reason[first] = drop.reasons if isinstance(drop.reasons, str) else drop.reasons[first]
        left &= ~drop.dropped
        alone.append(np.count_nonzero(drop.dropped & candidates) if place else np.count_nonzero(drop.dropped))
        in_sequence.append(np.count_nonzero(first))
        remaining.append(np.count_nonzero(left))
    table = SelectionTable(
        np.array([drop.title for drop in drops]),
        np.array(alone, np.int64),
        np.array(in_sequence, np.int64),
        np.array(remaining, np.int64),
    )
    return reason.astype(np.str_), table


def _group_names(facts: Facts) -> npt.NDArray[np.str_]:
    names: list[list[str]] = [[] for _ in range(facts.traces.traces)]
    for group in sorted(facts.decisions.groups):
        for row in np.flatnonzero(facts.members(group)):
            names[row].append(group)
    return np.array([";".join(parts) for parts in names], np.str_)


def _no_measures() -> TraceMeasures:
    from dataclasses import fields

    truths = {"rupture_found", "reaches_floor", "reforms"}
    return TraceMeasures(
        **{one.name: np.empty(0, np.bool_ if one.name in truths else np.float64) for one in fields(TraceMeasures)}
    )

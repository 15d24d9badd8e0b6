"""Rules applied to all traces at once, in three-valued logic.

A quantity that could not be measured (NaN) makes a comparison *unknown*; ``not`` leaves it unknown, ``and`` and
``or`` follow Kleene (Introduction to Metamathematics, 1952, section 64).  A trace meets a rule only where the rule is
true, so an unmeasured quantity never lets a trace pass, not even by negation; ``not known(...)`` asks for it openly.
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.errors import nearest
from meseta.selection.conditions import (
    Condition,
    Contains,
    Every,
    Exclude,
    Literal,
    Measure,
    Numbers,
    OneOf,
    Operand,
    Some,
    Span,
    Truth,
    Within,
    Word,
)
from meseta.selection.facts import Facts
from meseta.selection.grammar import rule_error
from meseta.selection.vocabulary import QUANTITIES, Asked, Quantity

__all__ = ["Evaluator", "Verdicts"]

Truths = npt.NDArray[np.bool_]
_COMPARE: dict[str, Callable[[Any, Any], Any]] = {
    "<": operator.lt,
    "<=": operator.le,
    ">": operator.gt,
    ">=": operator.ge,
    "==": operator.eq,
    "!=": operator.ne,
}


@dataclass(frozen=True)
class Verdicts:
    """Where a condition is true and where it is false; where neither, it is unknown."""

    true: Truths
    false: Truths

    @classmethod
    def of(cls, holds: Truths, known: Truths) -> Verdicts:
        """Return the verdicts of a comparison that is only known in places."""
        return cls(holds & known, ~holds & known)


@dataclass(frozen=True)
class _Values:
    """The values of an operand: one a trace, or a single one."""

    kind: str
    values: Any


class Evaluator:
    """Evaluates conditions over :class:`Facts`; ``text`` is the rule's text, for errors that point at a word."""

    def __init__(self, facts: Facts, text: str) -> None:
        self.facts, self.text = facts, text

    def verdicts(self, condition: Condition) -> Verdicts:
        """Return where the condition is true, false or unknown.

        Raises
        ------
        RecipeError
            Where a word is no quantity here, or the kinds do not fit.
        """
        match condition:
            case Every(parts):
                found = [self.verdicts(part) for part in parts]
                return Verdicts(_all(v.true for v in found), _any(v.false for v in found))
            case Some(parts):
                found = [self.verdicts(part) for part in parts]
                return Verdicts(_any(v.true for v in found), _all(v.false for v in found))
            case Exclude(part):
                inner = self.verdicts(part)
                return Verdicts(inner.false, inner.true)
            case Truth(measure):
                return self._truth(measure)
            case Numbers(operands, operators):
                return self._chain(operands, operators, condition.place)
            case Within(measure, span):
                return self._within(measure, span)
            case OneOf(measure, choices):
                return self._one_of(measure, choices)
            case Contains(measure, text):
                return self._contains(measure, text)

    # -- conditions ---------------------------------------------------------------------------------------------

    def _truth(self, measure: Measure) -> Verdicts:
        found = self._measure(measure)
        if found.kind != "truth":
            example = f'{measure.name} == "..."' if found.kind == "text" else f"{measure.name} > 0"
            what = f"'{measure.name}' is a {found.kind}, not true or false"
            raise self._error(what, measure, f"compare it: {example}")
        return Verdicts(found.values, ~found.values)

    def _chain(self, operands: tuple[Operand, ...], operators: tuple[str, ...], place: int) -> Verdicts:
        values = [self._operand(part) for part in operands]
        if not any(isinstance(part, Measure) for part in operands):
            raise rule_error("compares no quantity", self.text, place, "write one, such as highest_g0 > 0.8")
        pairs = [self._compare(values[i], values[i + 1], sign, operands[i + 1]) for i, sign in enumerate(operators)]
        return Verdicts(_all(pair.true for pair in pairs), _any(pair.false for pair in pairs))

    def _compare(self, left: _Values, right: _Values, sign: str, at: Operand) -> Verdicts:
        if left.kind != right.kind or left.kind == "truth":
            truths = "truth" in (left.kind, right.kind)
            remedy = "write truths alone, without a comparison" if truths else _quote_hint(at)
            raise self._error(f"a {left.kind} is compared with a {right.kind}", at, remedy)
        if left.kind == "text" and sign not in ("==", "!="):
            raise self._error(f"texts cannot be compared with {sign}", at, "use == or !=, or 'contains'")
        holds = np.broadcast_to(_COMPARE[sign](left.values, right.values), (self.facts.traces.traces,))
        return Verdicts.of(holds, self._known(left) & self._known(right))

    def _within(self, measure: Measure, span: Span) -> Verdicts:
        found = self._of_kind(measure, "number", "a range needs a number")
        low, high = span.bounds
        return Verdicts.of((found.values >= low) & (found.values < high), self._known(found))

    def _one_of(self, measure: Measure, choices: tuple[Literal, ...]) -> Verdicts:
        found = self._measure(measure)
        for choice in choices:
            kind = "text" if isinstance(choice.value, str) else "number"
            if kind != found.kind:
                raise self._error(f"'{measure.name}' is a {found.kind}, this is a {kind}", choice, _quote_hint(choice))
        holds = np.isin(found.values, [choice.value for choice in choices])
        return Verdicts.of(holds, self._known(found))

    def _contains(self, measure: Measure, text: Literal) -> Verdicts:
        found = self._of_kind(measure, "text", "only texts contain something")
        holds = np.char.find(found.values.astype(np.str_), str(text.value)) >= 0
        return Verdicts.of(holds, self._known(found))

    # -- values -------------------------------------------------------------------------------------------------

    def _operand(self, operand: Operand) -> _Values:
        if isinstance(operand, Literal):
            return _Values("text" if isinstance(operand.value, str) else "number", operand.value)
        return self._measure(operand)

    def _of_kind(self, measure: Measure, kind: str, why: str) -> _Values:
        found = self._measure(measure)
        if found.kind != kind:
            raise self._error(f"'{measure.name}' is a {found.kind}", measure, why)
        return found

    def _measure(self, measure: Measure) -> _Values:
        if measure.name in QUANTITIES:
            quantity = QUANTITIES[measure.name]
            return _Values(quantity.kind, quantity.find(self.facts, self._asked(quantity, measure)))
        if measure.name == "column":
            return self._column(self._one_text(measure), measure)
        if measure.name == "known":
            return self._is_known(measure)
        if measure.name in self.facts.traces.table:
            if measure.arguments:
                raise self._error(f"'{measure.name}' takes no arguments", measure, "leave the parentheses out")
            return self._column(measure.name, measure)
        raise self._unknown_name(measure.name, measure)

    def _unknown_name(self, name: str, at: Measure | Word | Literal) -> Exception:
        names = [*QUANTITIES, "known", "column", *self.facts.traces.table]
        return self._error(f"there is no quantity '{name}'", at, nearest(name, names))

    def _column(self, name: str, at: Measure | Word) -> _Values:
        table = self.facts.traces.table
        if name not in table:
            raise self._error(f"the trace table has no column '{name}'", at, nearest(name, table))
        values = np.asarray(table[name])
        if values.dtype.kind in "iuf":
            return _Values("number", values.astype(np.float64))
        return _Values("truth", values) if values.dtype.kind == "b" else _Values("text", values.astype(np.str_))

    def _is_known(self, measure: Measure) -> _Values:
        if len(measure.arguments) != 1 or not isinstance(measure.arguments[0], Word):
            raise self._error("'known' takes the name of one quantity", measure, "write known(crossing_length)")
        word = measure.arguments[0]
        return _Values("truth", self._known(self._measure(Measure(word.name, (), word.place))))

    def _known(self, found: _Values) -> Truths:
        shape = (self.facts.traces.traces,)
        if found.kind == "number":
            return np.broadcast_to(~np.isnan(found.values), shape)
        return np.broadcast_to(np.asarray(found.values) != "" if found.kind == "text" else np.True_, shape)

    # -- arguments ----------------------------------------------------------------------------------------------

    def _one_text(self, measure: Measure) -> str:
        if len(measure.arguments) != 1 or not isinstance(measure.arguments[0], Literal):
            raise self._error(f"'{measure.name}' takes one text in quotes", measure, f'write {measure.name}("name")')
        return str(measure.arguments[0].value)

    def _asked(self, quantity: Quantity, measure: Measure) -> Asked:
        bounds, place, text, word = Asked().bounds, Asked().place, "", ""
        given: set[str] = set()
        for argument in measure.arguments:
            kind = _argument_kind(argument)
            if kind == "span" and kind in given:
                kind = "place"
            if kind not in quantity.takes or kind in given:
                raise self._error(f"'{quantity.name}' does not take this", argument, _takes(quantity))
            given.add(kind)
            if isinstance(argument, Span) and kind == "place":
                place = argument.bounds
            elif isinstance(argument, Span):
                bounds = argument.bounds
            elif isinstance(argument, Word):
                word = self._word(quantity, argument)
            else:
                text = self._known_text(quantity, argument)
        if quantity.needs and quantity.needs not in given:
            raise self._error(f"'{quantity.name}' needs something in parentheses", measure, _takes(quantity))
        return Asked(bounds, place, text, word)

    def _word(self, quantity: Quantity, word: Word) -> str:
        if word.name not in quantity.words:
            what = f"'{quantity.name}' does not know '{word.name}'"
            raise self._error(what, word, nearest(word.name, quantity.words))
        return word.name

    def _known_text(self, quantity: Quantity, literal: Literal) -> str:
        """Return a group's or event's name; where there are others but not this one, it is taken as mistyped."""
        text, decisions = str(literal.value), self.facts.decisions
        names = set(decisions.groups) if quantity.name == "in_group" else {event.text for event in decisions.events}
        if names and text not in names:
            what = "group" if quantity.name == "in_group" else "event"
            raise self._error(f"there is no {what} '{text}'", literal, nearest(text, sorted(names)))
        return text

    def _error(self, what: str, at: Measure | Literal | Word | Span, remedy: str) -> Exception:
        return rule_error(what, self.text, at.place, remedy)


def _argument_kind(argument: Literal | Word | Span) -> str:
    if isinstance(argument, Span):
        return "span"
    if isinstance(argument, Word):
        return "word"
    return "text" if isinstance(argument.value, str) else "number"


def _takes(quantity: Quantity) -> str:
    if not quantity.takes:
        return "leave the parentheses out"
    examples = {"span": "1e-5..1e-3", "text": '"name"', "word": " or ".join(quantity.words)}
    taken = [examples[kind] for kind in ("span", "text", "word") if kind in quantity.takes]
    return f"write {quantity.name}({', '.join(taken)})"


def _quote_hint(at: Operand) -> str:
    if isinstance(at, Literal) and not isinstance(at.value, str):
        return f'write the text in quotes: "{at.text}"'
    return "numbers stand without quotes, texts with"


def _all(parts: Any) -> Truths:
    return np.logical_and.reduce(list(parts))


def _any(parts: Any) -> Truths:
    return np.logical_or.reduce(list(parts))

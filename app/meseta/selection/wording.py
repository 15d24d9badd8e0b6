"""Rules written out: as the text that parses to the same rule, and as an English sentence."""

from __future__ import annotations

import numpy as np

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
    Rule,
    Some,
    Span,
    Truth,
    Within,
    Word,
)
from meseta.selection.vocabulary import QUANTITIES

__all__ = ["rule_sentence", "rule_text"]


def rule_text(rule: Rule) -> str:
    """Return the text of a rule; :func:`~meseta.selection.grammar.parse_rule` gives an equal rule back."""
    label = f"{_quoted(rule.label)}: " if rule.label else ""
    return ("" if rule.active else "off ") + label + _text(rule.condition)


def rule_sentence(rule: Rule) -> str:
    """Return a rule as a sentence: "Keep a trace where ..."."""
    said = _said(rule.condition)
    return f"Keep a trace where {said}." if rule.active else f"(Switched off) Keep a trace where {said}."


# -- text ---------------------------------------------------------------------------------------------------------


def _text(condition: Condition) -> str:
    match condition:
        case Every(parts):
            return " and ".join(_inside(part, (Some, Every)) for part in parts)
        case Some(parts):
            return " or ".join(_inside(part, (Some,)) for part in parts)
        case Exclude(part):
            return f"not {_inside(part, (Some, Every, Numbers, Within, OneOf, Contains))}"
        case Truth(measure):
            return _measure_text(measure)
        case Numbers(operands, operators):
            words = [_operand_text(operands[0])]
            for sign, operand in zip(operators, operands[1:], strict=True):
                words += [sign, _operand_text(operand)]
            return " ".join(words)
        case Within(measure, span):
            return f"{_measure_text(measure)} in {_span_text(span)}"
        case OneOf(measure, choices):
            return f"{_measure_text(measure)} in [{', '.join(_literal_text(choice) for choice in choices)}]"
        case Contains(measure, text):
            return f"{_measure_text(measure)} contains {_literal_text(text)}"


def _inside(part: Condition, bracketed: tuple[type, ...]) -> str:
    return f"({_text(part)})" if isinstance(part, bracketed) else _text(part)


def _operand_text(operand: Operand) -> str:
    return _literal_text(operand) if isinstance(operand, Literal) else _measure_text(operand)


def _measure_text(measure: Measure) -> str:
    if not measure.arguments:
        return measure.name
    return f"{measure.name}({', '.join(_argument_text(argument) for argument in measure.arguments)})"


def _argument_text(argument: Literal | Word | Span) -> str:
    if isinstance(argument, Word):
        return argument.name
    return _span_text(argument) if isinstance(argument, Span) else _literal_text(argument)


def _span_text(span: Span) -> str:
    ends = ["" if end is None else _literal_text(end) for end in (span.low, span.high)]
    return "..".join(ends)


def _literal_text(literal: Literal) -> str:
    if isinstance(literal.value, str):
        return _quoted(literal.value)
    return literal.text or _number(literal.value)


def _number(value: float) -> str:
    return np.format_float_positional(value, trim="-") if 1e-3 <= abs(value) < 1e6 or value == 0 else f"{value!r}"


def _quoted(text: str) -> str:
    return '"' + text.replace('"', '""') + '"'


# -- sentence -----------------------------------------------------------------------------------------------------

_SIGNS = {
    "<": "is below",
    "<=": "is at most",
    ">": "is above",
    ">=": "is at least",
    "==": "is",
    "!=": "is not",
}
_DENIED = {
    "<": "is not below",
    "<=": "is not at most",
    ">": "is not above",
    ">=": "is not at least",
    "==": "is not",
    "!=": "is",
}
_TURNED = {"<": ">", "<=": ">=", ">": "<", ">=": "<=", "==": "==", "!=": "!="}


def _said(condition: Condition, denied: bool = False) -> str:
    match condition:
        case Exclude(Every() | Some() as part):
            return f"it does not hold that {_said(part)}"
        case Exclude(part):
            return _said(part, not denied)
        case Every(parts):
            return ", and ".join(_said(part) for part in parts)
        case Some(parts):
            return "either " + ", or ".join(_said(part) for part in parts)
        case Truth(measure):
            return _truth_said(measure, denied)
        case Numbers(operands, operators):
            return _comparison_said(operands, operators, denied)
        case Within(measure, span):
            return f"{_title(measure)} {'is not' if denied else 'is'} {_span_said(span)}{_unit(measure)}"
        case OneOf(measure, choices):
            words = " or ".join(_literal_text(choice) for choice in choices)
            return f"{_title(measure)} {'is not' if denied else 'is'} {words}"
        case Contains(measure, text):
            return f"{_title(measure)} {'does not contain' if denied else 'contains'} {_literal_text(text)}"


def _truth_said(measure: Measure, denied: bool) -> str:
    quantity = QUANTITIES.get(measure.name)
    if quantity is not None and quantity.kind == "truth":
        return _filled(quantity.denied if denied else quantity.title, measure)
    if measure.name == "known" and measure.arguments:
        asked = Measure(_argument_text(measure.arguments[0]))
        return f"{_title(asked)} could {'not ' if denied else ''}be measured"
    return f"{_title(measure)} is {'false' if denied else 'true'}"


def _comparison_said(operands: tuple[Operand, ...], operators: tuple[str, ...], denied: bool) -> str:
    if len(operators) > 1:
        parts = [_pair_said(operands[i], operands[i + 1], sign, False) for i, sign in enumerate(operators)]
        return ("it does not hold that " if denied else "") + " and ".join(parts)
    return _pair_said(operands[0], operands[1], operators[0], denied)


def _pair_said(left: Operand, right: Operand, sign: str, denied: bool) -> str:
    if isinstance(left, Literal) and isinstance(right, Measure):
        left, right, sign = right, left, _TURNED[sign]
    unit = _unit(left) if isinstance(left, Measure) and isinstance(right, Literal) else ""
    unit = "" if isinstance(right, Literal) and isinstance(right.value, str) else unit
    return f"{_operand_said(left)} {(_DENIED if denied else _SIGNS)[sign]} {_operand_said(right)}{unit}"


def _operand_said(operand: Operand) -> str:
    return _literal_text(operand) if isinstance(operand, Literal) else _title(operand)


def _title(measure: Measure) -> str:
    quantity = QUANTITIES.get(measure.name)
    if quantity is not None:
        return _filled(quantity.title, measure)
    if measure.name == "column" and measure.arguments:
        return f"the column {_argument_text(measure.arguments[0])}"
    return f"the column '{measure.name}'"


def _filled(title: str, measure: Measure) -> str:
    """Return a title with its arguments in their places."""
    span = text = word = ""
    for argument in measure.arguments:
        if isinstance(argument, Span):
            span += (
                f" and lying {_span_said(argument)} nm (or units of the drive)"
                if span
                else f" {_span_said(argument)} G0"
            )
        elif isinstance(argument, Word):
            word = f"{argument.name} "
        else:
            text = _literal_text(argument)
    return title.format(span=span, text=text, word=word)


def _span_said(span: Span) -> str:
    low, high = ("" if end is None else _literal_text(end) for end in (span.low, span.high))
    if low and high:
        return f"from {low} to below {high}"
    return f"from {low} up" if low else f"below {high}"


def _unit(measure: Measure) -> str:
    quantity = QUANTITIES.get(measure.name)
    unit = quantity.unit if quantity is not None else ""
    return f" {'drive units' if unit == 'drive' else unit}" if unit else ""

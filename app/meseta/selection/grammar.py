"""From the text of a rule to its parts.  The grammar is small, closed and our own; nothing is ever executed.

::

    rule       = ["off"] [TEXT ":"] either
    either     = both {"or" both}
    both       = negation {"and" negation}
    negation   = "not" negation | "(" either ")" | comparison
    comparison = operand {("<" | "<=" | ">" | ">=" | "==" | "!=") operand}
               | measure ["not"] "in" (span | "[" literal {"," literal} "]")
               | measure ["not"] "contains" TEXT
               | measure
    operand    = measure | literal
    measure    = NAME ["(" [argument {"," argument}] ")"]
    argument   = literal | span | NAME
    span       = [NUMBER] ".." [NUMBER]
    literal    = NUMBER | TEXT

Text stands in single or double quotes; a quote inside is written twice.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import NoReturn

from meseta.errors import RecipeError
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

__all__ = ["KEYWORDS", "parse_rule", "rule_error"]

KEYWORDS = ("and", "contains", "in", "not", "off", "or")
COMPARISONS = ("<=", ">=", "==", "!=", "<", ">")
DEEPEST = 40
LONGEST = 10_000

_TOKEN = re.compile(
    r"""\s*(?:
      (?P<number>[+-]?(?:\d+(?:\.(?!\.)\d*)?|\.\d+)(?:[eE][+-]?\d+)?(?![\w]))
    | (?P<name>[^\W\d]\w*)
    | (?P<text>"(?:[^"]|"")*"|'(?:[^']|'')*')
    | (?P<mark>\.\.|<=|>=|==|!=|[<>()\[\],:])
    )""",
    re.VERBOSE,
)


@dataclass(frozen=True)
class _Token:
    kind: str  # number, name, text, mark, end
    text: str
    place: int


def rule_error(what: str, text: str, place: int, remedy: str = "") -> RecipeError:
    """Return the error that points at one word of a rule."""
    shown = " ".join(text.split())
    shown = shown if len(shown) <= 60 else shown[:57] + "..."
    return RecipeError(what, f"selection.rules, '{shown}', column {place + 1}", remedy)


def parse_rule(text: str) -> Rule:
    """Understand the text of one rule.

    Raises
    ------
    RecipeError
        Pointing at the column of the word that does not fit, with what was expected there.
    """
    if len(text) > LONGEST:
        raise rule_error(f"is longer than {LONGEST} characters", text, 0, "write several rules")
    return _Parser(text).rule()


def _tokens(text: str) -> list[_Token]:
    tokens, place, end = [], 0, len(text.rstrip())
    while place < end:
        match = _TOKEN.match(text, place)
        if match is None:
            start = place + len(text[place:]) - len(text[place:].lstrip())
            if text[start] in "\"'":
                raise rule_error("this text has no closing quote", text, start, "end it with the quote it began with")
            raise rule_error(f"'{text[start]}' has no meaning here", text, start, _sign_remedy(text[start]))
        kind = str(match.lastgroup)
        tokens.append(_Token(kind, match.group(kind), match.start(kind)))
        place = match.end()
    return [*tokens, _Token("end", "", end)]


def _sign_remedy(sign: str) -> str:
    signs = {"=": "compare with ==", "&": "write 'and'", "|": "write 'or'", "!": "write 'not'", "~": "write 'not'"}
    return signs.get(sign, "a rule compares measured quantities: highest_g0 > 0.8 and plateaus >= 1")


class _Parser:
    """Reads tokens from left to right; one method a line of the grammar."""

    def __init__(self, text: str) -> None:
        self.text, self.tokens, self.at, self.depth = text, _tokens(text), 0, 0

    @property
    def now(self) -> _Token:
        return self.tokens[self.at]

    def next_is(self, *words: str) -> bool:
        return self.now.kind in ("name", "mark") and self.now.text in words

    def take(self) -> _Token:
        token = self.now
        self.at += token.kind != "end"
        return token

    def skip(self, *words: str) -> bool:
        found = self.next_is(*words)
        if found:
            self.take()
        return found

    def fail(self, expected: str) -> NoReturn:
        what = "the rule ends too early" if self.now.kind == "end" else f"'{self.now.text}' does not fit here"
        raise rule_error(what, self.text, self.now.place, f"expected {expected}")

    def need(self, word: str) -> None:
        if not self.skip(word):
            self.fail(f"'{word}'")

    def rule(self) -> Rule:
        active = not self.skip("off")
        label = ""
        if self.now.kind == "text" and self.tokens[self.at + 1].text == ":":
            label = _unquoted(self.take().text)
            self.take()
        condition = self.either()
        if self.now.kind != "end":
            self.fail("'and', 'or' or the end of the rule")
        return Rule(condition, label, active)

    def either(self) -> Condition:
        parts = [self.both()]
        while self.skip("or"):
            parts.append(self.both())
        return parts[0] if len(parts) == 1 else Some(tuple(parts))

    def both(self) -> Condition:
        parts = [self.negation()]
        while self.skip("and"):
            parts.append(self.negation())
        return parts[0] if len(parts) == 1 else Every(tuple(parts))

    def negation(self) -> Condition:
        self.depth += 1
        if self.depth > DEEPEST:
            raise rule_error("is nested too deeply", self.text, self.now.place, "write several rules")
        try:
            if self.skip("not"):
                return Exclude(self.negation())
            if self.skip("("):
                inner = self.either()
                self.need(")")
                return inner
            return self.comparison()
        finally:
            self.depth -= 1

    def comparison(self) -> Condition:
        place = self.now.place
        first = self.operand()
        if self.next_is(*COMPARISONS):
            operands, operators = [first], []
            while self.next_is(*COMPARISONS):
                operators.append(self.take().text)
                operands.append(self.operand())
            return Numbers(tuple(operands), tuple(operators), place)
        if isinstance(first, Literal):
            self.fail("a comparison (<, <=, >, >=, ==, !=)")
        if self.next_is("not") and self.tokens[self.at + 1].text in ("in", "contains"):
            self.take()
            return Exclude(self.membership(first))
        return self.membership(first) if self.next_is("in", "contains") else Truth(first)

    def membership(self, measure: Measure) -> Condition:
        if self.skip("contains"):
            if self.now.kind != "text":
                self.fail("a text in quotes")
            return Contains(measure, self.literal())
        self.need("in")
        if not self.skip("["):
            return Within(measure, self.span())
        choices = [self.literal()]
        while self.skip(","):
            choices.append(self.literal())
        self.need("]")
        return OneOf(measure, tuple(choices))

    def operand(self) -> Operand:
        return self.literal() if self.now.kind in ("number", "text") else self.measure()

    def measure(self) -> Measure:
        if self.now.kind != "name" or self.now.text in KEYWORDS:
            self.fail("a quantity, a number or a text in quotes")
        word = self.take()
        arguments: list[Literal | Word | Span] = []
        if self.skip("("):
            while not self.skip(")"):
                if arguments:
                    self.need(",")
                arguments.append(self.argument())
        return Measure(word.text, tuple(arguments), word.place)

    def argument(self) -> Literal | Word | Span:
        if self.now.kind == "name" and self.now.text not in KEYWORDS:
            word = self.take()
            return Word(word.text, word.place)
        if self.now.kind == "text":
            return self.literal()
        if self.now.kind == "number" and self.tokens[self.at + 1].text != "..":
            return self.literal()
        return self.span()

    def span(self) -> Span:
        place = self.now.place
        low = self.literal() if self.now.kind == "number" else None
        if not self.skip(".."):
            self.fail("a range such as 1e-5..1e-3" if low is None else "'..' and the upper end of the range")
        high = self.literal() if self.now.kind == "number" else None
        if low is None and high is None:
            self.fail("a number at one end of the range at least")
        span = Span(low, high, place)
        if span.bounds[0] >= span.bounds[1]:
            raise rule_error("this range is empty", self.text, place, "write the lower end first: 1e-5..1e-3")
        return span

    def literal(self) -> Literal:
        if self.now.kind not in ("number", "text"):
            self.fail("a number or a text in quotes")
        token = self.take()
        if token.kind == "text":
            return Literal(_unquoted(token.text), token.text, token.place)
        value = float(token.text)
        if value in (float("inf"), float("-inf")):
            raise rule_error(f"{token.text} is too large a number", self.text, token.place)
        return Literal(value, token.text, token.place)


def _unquoted(text: str) -> str:
    return text[1:-1].replace(text[0] * 2, text[0])

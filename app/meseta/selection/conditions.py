"""The parts that a selection rule is made of, once it is understood: a small frozen tree.

Every part knows where it stood in the text (``place``, counted from 0), so that an error can point at the word.
Places do not take part in comparisons: two texts that mean the same give equal trees.
"""

from __future__ import annotations

from dataclasses import dataclass, field

__all__ = [
    "Condition",
    "Contains",
    "Every",
    "Exclude",
    "Literal",
    "Measure",
    "Numbers",
    "OneOf",
    "Operand",
    "Rule",
    "Some",
    "Span",
    "Truth",
    "Within",
    "Word",
]


@dataclass(frozen=True)
class Literal:
    """A number or a text in quotes; ``text`` is the number as written."""

    value: float | str
    text: str = field(default="", compare=False)
    place: int = field(default=0, compare=False)


@dataclass(frozen=True)
class Word:
    """A bare word as the argument of a quantity: ``molecule`` in ``plateaus(1e-5..1e-3, molecule)``."""

    name: str
    place: int = field(default=0, compare=False)


@dataclass(frozen=True)
class Span:
    """A half-open range ``low..high``; an end that is left out is open."""

    low: Literal | None
    high: Literal | None
    place: int = field(default=0, compare=False)

    @property
    def bounds(self) -> tuple[float, float]:
        """Lower and upper bound, infinite where open."""
        low = float("-inf") if self.low is None else float(self.low.value)
        return low, float("inf") if self.high is None else float(self.high.value)


@dataclass(frozen=True)
class Measure:
    """A quantity of the trace, with its arguments if it takes any."""

    name: str
    arguments: tuple[Literal | Word | Span, ...] = ()
    place: int = field(default=0, compare=False)


Operand = Measure | Literal


@dataclass(frozen=True)
class Numbers:
    """A comparison, or a chain of them: ``operands[i] operators[i] operands[i + 1]``, all at once."""

    operands: tuple[Operand, ...]
    operators: tuple[str, ...]
    place: int = field(default=0, compare=False)


@dataclass(frozen=True)
class Within:
    """``measure in low..high``."""

    measure: Measure
    span: Span


@dataclass(frozen=True)
class OneOf:
    """``measure in ["a", "b"]``."""

    measure: Measure
    choices: tuple[Literal, ...]


@dataclass(frozen=True)
class Contains:
    """``measure contains "text"``."""

    measure: Measure
    text: Literal


@dataclass(frozen=True)
class Truth:
    """A quantity that is itself true or false."""

    measure: Measure


@dataclass(frozen=True)
class Exclude:
    """``not condition``."""

    part: Condition


@dataclass(frozen=True)
class Every:
    """Parts joined by ``and``."""

    parts: tuple[Condition, ...]


@dataclass(frozen=True)
class Some:
    """Parts joined by ``or``."""

    parts: tuple[Condition, ...]


Condition = Numbers | Within | OneOf | Contains | Truth | Exclude | Every | Some


@dataclass(frozen=True)
class Rule:
    """One rule: a condition that a trace must meet, with a name of its own and a switch.

    Attributes
    ----------
    condition : Condition
    label : str
        Name that stands in tables instead of the text; empty where the rule has none.
    active : bool
        False where the rule is switched off (it stays in the recipe).
    """

    condition: Condition
    label: str = ""
    active: bool = True

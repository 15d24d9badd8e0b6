"""The frozen parts of the window's model: the document that undo goes over, and how it is looked at."""

from __future__ import annotations

from dataclasses import dataclass, field

from meseta.recipe import Recipe
from meseta.selection.decisions import Decisions
from meseta.window.conditions import ConditionSet

__all__ = ["FROM_RAW", "Change", "Document", "Hover", "Span"]

FROM_RAW = ("intake", "calibration", "cutting")
"""Sections of the recipe that decide how traces are made of recordings."""


@dataclass(frozen=True)
class Document:
    """All that undo goes over."""

    recipe: Recipe = field(default_factory=Recipe)
    decisions: Decisions = field(default_factory=Decisions)
    conditions: ConditionSet = field(default_factory=ConditionSet)


@dataclass(frozen=True)
class Change:
    """A document before and after, as views hear of it."""

    before: Document
    after: Document

    @property
    def recipe(self) -> bool:
        """Whether the recipe changed."""
        return self.before.recipe != self.after.recipe

    @property
    def decisions(self) -> bool:
        """Whether decisions by hand changed."""
        return self.before.decisions != self.after.decisions

    @property
    def conditions(self) -> bool:
        """Whether the conditions changed."""
        return self.before.conditions != self.after.conditions


@dataclass(frozen=True)
class Hover:
    """Where the pointer is: height on the conductance axis as drawn, displacement where the plot has one."""

    u: float
    drive: float = float("nan")
    unit: str = "nm"


@dataclass(frozen=True)
class Span:
    """The part of the conductance axis in view, as drawn: log10 G or G."""

    low: float
    high: float

    def zoomed(self, factor: float, around: float) -> Span:
        """Return the span made ``factor`` times as wide, keeping one height in place."""
        return Span(around - (around - self.low) * factor, around + (self.high - around) * factor)

    def moved(self, by: float) -> Span:
        """Return the span shifted."""
        return Span(self.low + by, self.high + by)

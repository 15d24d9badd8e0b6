"""Conditions drawn on the plots: windows on axes as sentences, and as text of the selection's own rule language."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

from meseta import typeset

__all__ = ["BOXES", "WINDOWS", "Condition", "ConditionSet", "Kind"]

Kind = Literal["plateau", "passes", "settles", "range", "rule"]
WINDOWS = ("plateau", "passes", "settles")
"""Kinds that have a conductance window."""
BOXES = ("passes", "settles")
"""Kinds that have a window of displacement as well."""


def _exact(value: float) -> str:
    """Return a number as the rule language reads it, rounded to five digits so that the text stays readable."""
    return f"{value:.5g}"


@dataclass(frozen=True)
class Condition:
    """One window on an axis, or one rule in words, that a trace meets or does not.

    Attributes
    ----------
    kind : str
        "plateau" (a plateau whose conductance lies in the window), "passes" (samples in a window of conductance and
        displacement), "settles" (a plateau there), "range" (traces of a stretch of the record), "rule" (text of the
        rule language).
    low_g0, high_g0 : float
        Conductance window.
    low_drive, high_drive : float
        Displacement window, in the drive's unit, from the zero of displacement.
    first, last : int
        Stretch of the record, both ends included.
    longer_than : float
        For "plateau": shortest length of the plateau in the drive's unit; 0 asks for none.
    text : str
        For "rule".
    on, inverted : bool
        Switched on; "not" before it.
    name : str
        Given by the user; empty where none.
    """

    kind: Kind
    low_g0: float = 0.0
    high_g0: float = 0.0
    low_drive: float = 0.0
    high_drive: float = 0.0
    first: int = 0
    last: int = 0
    longer_than: float = 0.0
    text: str = ""
    on: bool = True
    inverted: bool = False
    name: str = ""
    unit: str = "nm"

    def sentence(self) -> str:
        """Return the condition as a reader says it."""
        return ("not: " if self.inverted else "") + self._plain_sentence()

    def _plain_sentence(self) -> str:
        if self.kind == "plateau":
            longer = f", longer than {typeset.quantity(self.longer_than, self.unit, 2)}" if self.longer_than else ""
            return f"a plateau between {self._window()}{longer}"
        if self.kind in BOXES:
            between = typeset.interval(self.low_drive, self.high_drive, self.unit, 2).replace(" to ", " and ")
            if self.kind == "passes":
                return f"passes between {self._window()}, {between} from the zero"
            return f"a plateau between {self._window()} whose middle lies between {between}"
        if self.kind == "range":
            return f"traces {typeset.integer(self.first)} to {typeset.integer(self.last)} of the record"
        return self.text

    def _window(self) -> str:
        return typeset.interval(self.low_g0, self.high_g0, "G0", 2).replace(" to ", " and ")

    def rule(self) -> str:
        """Return the condition in the rule language of the selection."""
        text = self._plain_rule()
        return f"not ({text})" if self.inverted else text

    def _plain_rule(self) -> str:
        if self.kind == "plateau":
            window = f"{_exact(self.low_g0)}..{_exact(self.high_g0)}"
            if not self.longer_than:
                return f"plateaus({window}) >= 1"
            quantity = "longest_plateau_nm" if self.unit == "nm" else "longest_plateau_drive"
            return f"{quantity}({window}) >= {_exact(self.longer_than)}"
        if self.kind in BOXES:
            window = f"{_exact(self.low_g0)}..{_exact(self.high_g0)}"
            quantity = "samples_inside" if self.kind == "passes" else "plateaus"
            return f"{quantity}({window}, {_exact(self.low_drive)}..{_exact(self.high_drive)}) >= 1"
        if self.kind == "range":
            return f"trace in {self.first}..{self.last + 1}"
        return self.text

    def with_window(self, low_g0: float, high_g0: float) -> Condition:
        """Return the condition with another conductance window."""
        return replace(self, low_g0=min(low_g0, high_g0), high_g0=max(low_g0, high_g0))


@dataclass(frozen=True)
class ConditionSet:
    """Conditions combined by "and" or by "or"; those switched off take no part."""

    conditions: tuple[Condition, ...] = ()
    joined: Literal["and", "or"] = "and"

    @property
    def active(self) -> tuple[Condition, ...]:
        """Conditions that are switched on."""
        return tuple(condition for condition in self.conditions if condition.on)

    def rule(self) -> str:
        """Return all active conditions as one rule; empty where there is none."""
        parts = [condition.rule() for condition in self.active]
        if len(parts) < 2:
            return "".join(parts)
        return f" {self.joined} ".join(f"({part})" for part in parts)

    def sentence(self) -> str:
        """Return all active conditions as one sentence."""
        return f" {self.joined} ".join(condition.sentence() for condition in self.active)

    def added(self, condition: Condition) -> ConditionSet:
        """Return the set with one more condition."""
        return replace(self, conditions=(*self.conditions, condition))

    def changed(self, index: int, condition: Condition) -> ConditionSet:
        """Return the set with another condition in one place."""
        conditions = list(self.conditions)
        conditions[index] = condition
        return replace(self, conditions=tuple(conditions))

    def without(self, index: int) -> ConditionSet:
        """Return the set without one condition."""
        return replace(self, conditions=self.conditions[:index] + self.conditions[index + 1 :])

"""Section ``[selection]``: which traces take part in the result."""

from __future__ import annotations

from meseta.recipe.fields import Section, setting

__all__ = ["SelectionSettings"]


class SelectionSettings(Section):
    """Stated, reversible rules."""

    rules: list[str] = setting(
        None,
        "Rules",
        "Each trace must meet every rule, in this order; a dropped trace names the first rule that dropped it. "
        "Example: 'rupture_found and plateaus(1e-5..1e-3) >= 1'. A name in quotes and a colon in front name the rule; "
        "'off' in front switches it off. The help page on rules lists every quantity.",
        factory=list,
    )
    measures: list[str] = setting(
        None,
        "Own measures",
        "Names of installed measures (plug-ins) that add a number to every trace, for rules and tables.",
        factory=list,
    )

"""Section ``[selection]``: which traces take part in the result."""

from __future__ import annotations

from meseta.recipe.fields import Section, setting

__all__ = ["SelectionSettings"]


class SelectionSettings(Section):
    """Stated, reversible rules."""

    rules: list[str] = setting(
        None,
        "Rules",
        "Each trace must meet every rule, in this order; a dropped trace names the first rule that "
        "dropped it. Example: 'rupture_found and plateaus >= 1'.",
        factory=list,
    )

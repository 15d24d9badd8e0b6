"""Which traces meet the conditions: asked of the selection's own rules, so that drawing and rule are one thing."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta import selection
from meseta.analysis import Analysis
from meseta.recipe.selection import SelectionSettings
from meseta.selection import Decisions
from meseta.work import Work

__all__ = ["mask_of"]


def mask_of(analysis: Analysis, rule: str, work: Work) -> npt.NDArray[np.bool_]:
    """Return (traces,) bool of the traces that meet a rule, decisions by hand left aside.

    Raises
    ------
    RecipeError
        Where the rule is not understood.
    """
    settings = SelectionSettings(rules=[rule])
    found = selection.select(
        analysis.traces,
        settings,
        analysis.result("measures", work),
        analysis.result("plateaus", work),
        Decisions(groups=analysis.decisions.groups),
        analysis.recipe.histogram.direction,
    )
    kept: npt.NDArray[np.bool_] = found.kept
    return kept

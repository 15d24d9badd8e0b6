"""Which traces meet the conditions: asked of the selection's own rules, so that drawing and rule are one thing."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis

__all__ = ["mask_of"]


def mask_of(analysis: Analysis, rule: str, work: Work) -> npt.NDArray[np.bool_]:
    """Return (traces,) bool of the traces of the analysed direction that meet a rule, verdicts by hand left aside.

    Raises
    ------
    RecipeError
        Where the rule is not understood.
    """
    from meseta.selection import Decisions, parse_rules
    from meseta.selection.evaluation import Evaluator
    from meseta.selection.facts import Facts

    facts = Facts(
        analysis.traces,
        analysis.result("measures", work),
        analysis.result("plateaus", work),
        Decisions(groups=analysis.decisions.groups, events=analysis.decisions.events),
    )
    ((text, parsed),) = parse_rules([rule])
    met: npt.NDArray[np.bool_] = Evaluator(facts, text).verdicts(parsed.condition).true
    return met & (analysis.traces.table["direction"] == analysis.recipe.histogram.direction)

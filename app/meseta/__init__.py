"""Meseta: from raw recordings of breaking contacts to conductance peaks with honest uncertainties.

The public names below are loaded on first use, so that ``import meseta`` stays light.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_PUBLIC = {
    "Analysis": "meseta.analysis",
    "MesetaError": "meseta.errors",
    "Recipe": "meseta.recipe",
    "Study": "meseta.study",
    "TraceSet": "meseta.traces",
    "Work": "meseta.work",
    "conductance_histogram": "meseta.analysis",
    "correlation_histogram": "meseta.analysis",
    "displacement_histogram": "meseta.analysis",
    "find_plateaus": "meseta.analysis",
    "fit_peaks": "meseta.analysis",
    "read": "meseta.study",
}

__all__ = [*sorted(_PUBLIC), "__version__"]

if TYPE_CHECKING:
    from meseta.analysis import (
        Analysis,
        conductance_histogram,
        correlation_histogram,
        displacement_histogram,
        find_plateaus,
        fit_peaks,
    )
    from meseta.errors import MesetaError
    from meseta.recipe import Recipe
    from meseta.study import Study, read
    from meseta.traces import TraceSet
    from meseta.work import Work


def __getattr__(name: str) -> Any:
    if name in _PUBLIC:
        value = getattr(importlib.import_module(_PUBLIC[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'meseta' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted({*globals(), *_PUBLIC})

"""Analysis: runs the steps of a Recipe over a TraceSet and recomputes only what a change touches.

One table of steps (:data:`STEPS`) says everything: what each step needs, which settings it may see, how one block of
traces is worked, and how the blocks are put together in trace order.  A result's key is the hash of the traces, the
step's version, the settings it may see and the keys of what it needs; so an edit leaves every other key alone, undo is
a cache hit, and any number of threads gives the same bits.
"""

from meseta.analysis.compare import compare_parts, compare_recordings, yield_in_window
from meseta.analysis.core import Analysis
from meseta.analysis.functions import (
    conductance_histogram,
    correlation_histogram,
    defensible_analyses,
    displacement_histogram,
    find_plateaus,
    fit_peaks,
)
from meseta.analysis.saving import save_result
from meseta.analysis.steps import STEPS, SettingsView, Step, phases_of

__all__ = [
    "STEPS",
    "Analysis",
    "SettingsView",
    "Step",
    "compare_parts",
    "compare_recordings",
    "conductance_histogram",
    "correlation_histogram",
    "defensible_analyses",
    "displacement_histogram",
    "find_plateaus",
    "fit_peaks",
    "phases_of",
    "save_result",
    "yield_in_window",
]

"""Peaks: the table they are edited in, residuals, what moves them, and all analyses that could be defended."""

from meseta.window.views.declaration import View
from meseta.window.views.peaks.analyses import AnalysesPanel
from meseta.window.views.peaks.residuals import ResidualsPanel
from meseta.window.views.peaks.systematic import SystematicPanel
from meseta.window.views.peaks.table import PeaksPanel

__all__ = ["PEAKS", "VIEWS"]

PEAKS = View("peaks", "Peaks", "right", PeaksPanel, help_page="peaks")
VIEWS = (
    View("residuals", "Residuals", "spine", ResidualsPanel, help_page="peaks", shown=False, stretch=5),
    View("systematic", "What moves the peaks", "right", SystematicPanel, help_page="peaks", shown=False, room=380),
    View("analyses", "All analyses", "right", AnalysesPanel, help_page="peaks", shown=False, room=480),
)
"""Views of peaks beyond the table."""

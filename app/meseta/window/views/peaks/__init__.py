"""Peaks: the table they are edited in, residuals, what moves them, and all analyses that could be defended."""

from meseta.window.views.declaration import View
from meseta.window.views.peaks.table import PeaksPanel

__all__ = ["VIEWS"]

VIEWS = (View("peaks", "Peaks", "right", PeaksPanel, help_page="peaks"),)

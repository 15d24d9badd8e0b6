"""Parts of the recording, or recordings, on one axis with one normalisation."""

from meseta.window.views.comparison.panel import ComparisonPanel
from meseta.window.views.declaration import View

__all__ = ["VIEW"]

VIEW = View("comparison", "Comparison", "spine", ComparisonPanel, help_page="comparison", shown=False, stretch=14)

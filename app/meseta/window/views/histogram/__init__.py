"""The conductance histogram on its side, with its fit."""

from meseta.window.views.declaration import View
from meseta.window.views.histogram.panel import HistogramPanel

__all__ = ["VIEW"]

VIEW = View("histogram", "Conductance histogram", "spine", HistogramPanel, help_page="histogram", stretch=11)

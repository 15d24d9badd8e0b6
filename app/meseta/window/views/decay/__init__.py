"""The decay constant of a length series: points, fit, band."""

from meseta.window.views.decay.panel import DecayPanel
from meseta.window.views.declaration import View

__all__ = ["VIEW"]

VIEW = View("decay", "Decay constant", "right", DecayPanel, help_page="peaks", shown=False, room=460)

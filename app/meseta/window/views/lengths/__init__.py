"""Length histograms, with Kaplan-Meier curves beside them."""

from meseta.window.views.declaration import View
from meseta.window.views.lengths.panel import LengthsPanel

__all__ = ["VIEW"]

VIEW = View(
    "lengths",
    "Length histogram",
    "right",
    LengthsPanel,
    help_page="lengths",
    steps=("length_histograms", "slope_histogram"),
    shown=False,
    room=460,
)

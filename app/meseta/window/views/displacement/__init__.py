"""The 2D conductance-displacement histogram."""

from meseta.window.views.declaration import View
from meseta.window.views.displacement.panel import DisplacementPanel

__all__ = ["VIEW"]

VIEW = View("displacement", "2D histogram", "spine", DisplacementPanel, help_page="displacement_histogram", stretch=10)

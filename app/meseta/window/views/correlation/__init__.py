"""The 2D correlation histogram."""

from meseta.window.views.correlation.panel import CorrelationPanel
from meseta.window.views.declaration import View

__all__ = ["VIEW"]

VIEW = View(
    "correlation",
    "2D correlation histogram",
    "right",
    CorrelationPanel,
    help_page="correlation",
    shown=False,
    room=480,
)

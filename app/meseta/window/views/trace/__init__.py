"""The trace view: the current trace with its plateaus, over the traces that the conditions pick."""

from meseta.window.views.declaration import View
from meseta.window.views.trace.panel import TracePanel

__all__ = ["VIEW"]

VIEW = View("trace", "Trace", "spine", TracePanel, help_page="plateaus", stretch=10)

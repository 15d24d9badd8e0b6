"""The record strip: the temporal histogram as drift check, scroll bar and selector."""

from meseta.window.views.declaration import View
from meseta.window.views.strip.panel import StripPanel

__all__ = ["VIEW"]

VIEW = View("strip", "Record", "below", StripPanel, help_page="temporal", steps=("drift",))

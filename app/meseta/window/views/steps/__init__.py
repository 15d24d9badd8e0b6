"""The steps of the recipe in the order of the job."""

from meseta.window.views.declaration import View
from meseta.window.views.steps.panel import StepsPanel

__all__ = ["VIEW"]

VIEW = View("steps", "Steps", "left", StepsPanel, help_page="window")

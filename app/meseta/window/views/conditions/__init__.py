"""Conditions drawn on the plots, and groups of traces."""

from meseta.window.views.conditions.groups import GroupsPanel
from meseta.window.views.conditions.panel import ConditionsPanel
from meseta.window.views.declaration import View

__all__ = ["VIEWS"]

VIEWS = (
    View("conditions", "Conditions", "right", ConditionsPanel, help_page="conditions"),
    View("groups", "Groups", "right", GroupsPanel, help_page="conditions"),
)

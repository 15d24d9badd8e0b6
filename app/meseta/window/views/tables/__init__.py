"""Tables of plateaus, traces and rules."""

from meseta.window.views.declaration import View
from meseta.window.views.tables.panels import PlateausTable, RulesTable, TracesTable

__all__ = ["VIEWS"]

VIEWS = (
    View("plateaus", "Plateaus", "right", PlateausTable, help_page="plateaus"),
    View("traces", "Traces", "right", TracesTable, help_page="selection"),
    View("rules", "Rules", "right", RulesTable, help_page="selection"),
)

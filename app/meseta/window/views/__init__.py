"""Every view of the window: one folder a view, each declares its parts in one :class:`View`.

To add a view, write a folder with a widget and a ``VIEW``, and name it in :data:`VIEWS`.
"""

from __future__ import annotations

from meseta.window.views.comparison import VIEW as COMPARISON
from meseta.window.views.conditions import VIEWS as CONDITIONS
from meseta.window.views.correlation import VIEW as CORRELATION
from meseta.window.views.decay import VIEW as DECAY
from meseta.window.views.declaration import View
from meseta.window.views.displacement import VIEW as DISPLACEMENT
from meseta.window.views.histogram import VIEW as HISTOGRAM
from meseta.window.views.lengths import VIEW as LENGTHS
from meseta.window.views.peaks import PEAKS
from meseta.window.views.peaks import VIEWS as PEAK_VIEWS
from meseta.window.views.record import VIEW as RECORD
from meseta.window.views.steps import VIEW as STEPS
from meseta.window.views.strip import VIEW as STRIP
from meseta.window.views.tables import VIEWS as TABLES
from meseta.window.views.trace import VIEW as TRACE

__all__ = ["VIEWS", "View"]

VIEWS: tuple[View, ...] = (
    TRACE,
    DISPLACEMENT,
    HISTOGRAM,
    STRIP,
    STEPS,
    PEAKS,
    *TABLES,
    *CONDITIONS,
    *PEAK_VIEWS,
    CORRELATION,
    RECORD,
    LENGTHS,
    COMPARISON,
    DECAY,
)
"""All views, in the order in which menus name them."""

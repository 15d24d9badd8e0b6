"""What the order of the traces tells: likeness of later traces, drift, and what the record is worth."""

from meseta.window.views.declaration import View
from meseta.window.views.record.panel import RecordPanel

__all__ = ["VIEW"]

VIEW = View(
    "record",
    "Memory of the record",
    "right",
    RecordPanel,
    help_page="temporal",
    steps=("shifted_correlation", "drift"),
    shown=False,
    room=480,
)

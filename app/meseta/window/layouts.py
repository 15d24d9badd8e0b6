"""Small help with layouts."""

from __future__ import annotations

from PySide6.QtWidgets import QLayout

__all__ = ["emptied"]


def emptied(layout: QLayout) -> None:
    """Take every widget out of a layout and let go of it."""
    while layout.count():
        item = layout.takeAt(0)
        widget = None if item is None else item.widget()
        if widget is not None:
            widget.hide()
            widget.deleteLater()

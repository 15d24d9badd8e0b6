"""The window: the only room that knows Qt.  It adds no number of its own."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from meseta.recipe import Recipe

__all__ = ["open_window"]


def open_window(paths: list[str], recipe: Recipe | None = None) -> int:
    """Run the window until it is closed; see :func:`meseta.window.application.open_window`."""
    from meseta.window.application import open_window as run

    return run(paths, recipe)

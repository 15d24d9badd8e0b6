"""What a view may ask of the window it stands in, and nothing more."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Protocol

import numpy.typing as npt
from PySide6.QtCore import QSettings

from meseta.window.session import Session
from meseta.window.theme import Theme, ThemeKeeper

__all__ = ["Frame"]


class Frame(Protocol):
    """The window as its views see it."""

    session: Session
    themes: ThemeKeeper
    settings: QSettings

    @property
    def theme(self) -> Theme:
        """The colours in use."""
        ...

    def say(self, text: str) -> None:
        """Show a passing remark in the status line."""
        ...

    def show_help(self, page: str) -> None:
        """Open a page of the built-in help."""
        ...

    def run_action(self, name: str) -> None:
        """Run one of the window's actions by its key."""
        ...

    def decide(self, rows: list[int], keep: bool | None) -> None:
        """Keep or reject traces by hand, or leave them to the rules (None)."""
        ...

    def look_at(self, conductance_g0: float) -> None:
        """Bring a conductance into view."""
        ...

    def reset_view(self) -> None:
        """Show the whole of both axes."""
        ...

    def export_columns(self, name: str, columns: Mapping[str, npt.NDArray[Any]]) -> None:
        """Ask where, and write columns as CSV off the window's thread."""
        ...

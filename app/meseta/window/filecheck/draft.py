"""A draft of the recipe while files are checked: the forms write into it, nothing else changes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy.typing as npt

from meseta.recipe import Recipe
from meseta.window.frame import Frame
from meseta.window.session import Session
from meseta.window.theme import Theme, ThemeKeeper

__all__ = ["DraftFrame"]


class DraftFrame:
    """The window as the forms of the file check see it: another session, the same help and colours."""

    def __init__(self, frame: Frame, recipe: Recipe) -> None:
        self._frame = frame
        self.session = Session(frame.session.jobs, recipe, frame.session)
        self.themes: ThemeKeeper = frame.themes
        self.settings = frame.settings

    @property
    def theme(self) -> Theme:
        """The colours in use."""
        return self._frame.theme

    def say(self, text: str) -> None:
        """Show a passing remark."""
        self._frame.say(text)

    def show_help(self, page: str) -> None:
        """Open a page of the help."""
        self._frame.show_help(page)

    def run_action(self, name: str) -> None:
        """Run one of the window's actions."""
        self._frame.run_action(name)

    def decide(self, rows: list[int], keep: bool | None) -> None:
        """Decide nothing: there are no traces yet."""

    def look_at(self, conductance_g0: float) -> None:
        """Look at nothing: there are no plots yet."""

    def reset_view(self) -> None:
        """Reset nothing: there are no plots yet."""

    def export_columns(self, name: str, columns: Mapping[str, npt.NDArray[Any]]) -> None:
        """Hand an export on."""
        self._frame.export_columns(name, columns)

"""What a view says of itself; the window builds docks, menus and shortcuts from it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from PySide6.QtWidgets import QWidget

from meseta.window.frame import Frame

__all__ = ["Area", "View"]

Area = Literal["spine", "below", "left", "right"]


@dataclass(frozen=True)
class View:
    """A view of the window.

    Attributes
    ----------
    name : str
        Key, also of its remembered place.
    title : str
        As menus and docks show it.
    area : str
        "spine" (beside the other plots on the conductance axis), "below", "left" or "right" (docks).
    make : callable
        (Frame) -> widget.
    help_page : str
        Page of the built-in help.
    steps : tuple of str
        Steps of the analysis that it shows beyond those that are always computed; computed only while it is visible.
    shown : bool
        Whether it is visible at first.
    stretch : int
        Share of the width, for the spine.
    room : int
        Pixels that a dock on the right asks for when it is shown; 0 asks for none.
    """

    name: str
    title: str
    area: Area
    make: Callable[[Frame], QWidget]
    help_page: str = ""
    steps: tuple[str, ...] = ()
    shown: bool = True
    stretch: int = 10
    room: int = 0

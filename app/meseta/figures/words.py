"""Words on figures: units in full, and what stands where there is nothing to draw."""

from __future__ import annotations

from matplotlib.axes import Axes

from meseta import colours, typeset

__all__ = ["per", "say"]


def per(unit: str) -> str:
    """Return a unit written with slashes as words: ``nm / trace / decade`` -> ``nm per trace per decade``."""
    return " per ".join(typeset.unit_text(part.strip()) for part in unit.split("/")) if unit else ""


def say(axes: Axes, text: str) -> None:
    """Say in the middle of the axes why they are empty."""
    axes.text(
        0.5,
        0.5,
        text,
        transform=axes.transAxes,
        ha="center",
        va="center",
        color=colours.LIGHT.doubtful,
        linespacing=1.3,
    )

"""The conductance axis of a figure: drawn in u = log10 G or u = G, with tick text set as in print."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.ticker import FixedFormatter, FixedLocator, MaxNLocator, NullFormatter

from meseta import colours, typeset
from meseta.histograms import Grid

__all__ = ["ConductanceScale", "plain_ticks"]

Floats = npt.NDArray[np.float64]
_MOST_DECADES_LABELLED: Final = 9


@dataclass(frozen=True)
class ConductanceScale:
    """A conductance axis as drawn.

    Attributes
    ----------
    logarithmic : bool
    low, high : float
        Ends of the axis in u.
    """

    logarithmic: bool
    low: float
    high: float

    @classmethod
    def of(cls, grid: Grid) -> ConductanceScale:
        """Return the axis that shows the whole of a grid."""
        edges = grid.u_edges
        return cls(grid.axis == "logarithmic", float(edges[0]), float(edges[-1]))

    @property
    def label(self) -> str:
        """Name and unit, as written on the axis."""
        return f"Conductance ({typeset.G0})"

    @property
    def width_unit(self) -> str:
        """What a width along the axis is counted in."""
        return "decade" if self.logarithmic else typeset.G0

    def u(self, conductance_g0: npt.ArrayLike) -> Floats:
        """Return the place on the axis of a conductance in G0; NaN where it has none."""
        values = np.asarray(conductance_g0, float)
        if not self.logarithmic:
            return values
        return np.log10(np.where(values > 0, values, np.nan))

    def decorate(self, axis: Axis, labelled: bool = True) -> None:
        """Set ticks, tick text and ends of a matplotlib axis that shows this conductance axis."""
        if self.logarithmic:
            self._decades(axis, labelled)
        else:
            plain_ticks(axis, self.low, self.high, labelled)
        axis.set_view_interval(self.low, self.high, ignore=True)

    def _decades(self, axis: Axis, labelled: bool) -> None:
        first, last = int(np.ceil(self.low - 1e-9)), int(np.floor(self.high + 1e-9))
        decades = np.arange(first, last + 1)
        every = 1 + len(decades) // _MOST_DECADES_LABELLED
        texts = [typeset.power_of_ten(int(power)) if power % every == 0 else "" for power in decades]
        axis.set_major_locator(FixedLocator(decades.tolist()))
        axis.set_major_formatter(FixedFormatter(texts if labelled else [""] * len(texts)))
        between = np.log10(np.arange(2, 10))
        minor = (np.arange(first - 1, last + 1)[:, None] + between).ravel()
        axis.set_minor_locator(FixedLocator(minor[(minor > self.low) & (minor < self.high)].tolist()))
        axis.set_minor_formatter(NullFormatter())

    def guides(self, axes: Axes, sideways: bool, closest_u: float) -> None:
        """Draw hairlines at whole multiples of G0, as far as they stand at least ``closest_u`` apart."""
        numbers = np.arange(1, 200)
        places = self.u(numbers)
        inside = (places > self.low) & (places < self.high)
        gaps = np.diff(places, prepend=-np.inf)
        apart = np.logical_and.accumulate(gaps >= closest_u)
        for place in places[inside & apart]:
            line = axes.axhline if sideways else axes.axvline
            line(place, color=colours.LIGHT.hairline, linewidth=0.4, zorder=0.6)


def plain_ticks(axis: Axis, low: float, high: float, labelled: bool = True, most: int = 6) -> None:
    """Set round ticks of a linear axis, their text with a true minus sign."""
    ticks = np.asarray(MaxNLocator(most, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high))
    slack = 1e-9 * (high - low)
    ticks = ticks[(ticks >= low - slack) & (ticks <= high + slack)]
    step = ticks[1] - ticks[0] if len(ticks) > 1 else abs(high - low)
    decimals = max(0, -int(np.floor(np.log10(step) + 1e-9))) if step > 0 else 0
    if step > 0 and abs(step * 10**decimals - round(step * 10**decimals)) > 1e-6:
        decimals += 1
    clean = [0.0 if abs(tick) < abs(step) / 1e6 else float(tick) for tick in ticks]
    axis.set_major_locator(FixedLocator(ticks.tolist()))
    axis.set_major_formatter(FixedFormatter([_tick_text(tick, decimals) if labelled else "" for tick in clean]))
    axis.set_minor_formatter(NullFormatter())


def _tick_text(value: float, decimals: int) -> str:
    if value == 0:
        return "0"
    if decimals > 4 or abs(value) >= 1e5:
        return typeset.number(value, 2)
    return f"{value:.{decimals}f}".replace("-", typeset.MINUS)

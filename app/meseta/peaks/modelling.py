"""From starting values on the axis to the model that is fitted."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import Grid
from meseta.peaks.model import Model
from meseta.peaks.windows import Start, rebinned
from meseta.recipe.peaks import PeakSettings

__all__ = ["is_logarithmic", "model_of"]

Floats = npt.NDArray[np.float64]


def model_of(
    grid: Grid,
    settings: PeakSettings,
    starts: tuple[Start, ...],
    bins: tuple[int, int],
    merge: int,
    background: str,
    template: Floats,
) -> Model:
    """Return the model of some peaks over a range of bins of a grid."""
    first, last = bins
    last -= (last - first) % merge
    logarithmic = is_logarithmic(grid, settings)
    edges_g0 = grid.edges_g0[first : last + 1 : merge]
    edges = np.log10(edges_g0) if logarithmic else edges_g0
    placed = [_on_axis(start, grid, logarithmic) for start in starts]
    position, width = np.array([s.position_u for s in placed]), np.array([s.width_u for s in placed])
    span, step = float(edges[-1] - edges[0]), float(np.diff(edges).min())
    tied = np.array([start.tied for start in placed], bool)
    return Model(
        shape=settings.shape,
        background="template" if background == "tunnelling" else background,
        low=np.ascontiguousarray(edges[:-1]),
        high=np.ascontiguousarray(edges[1:]),
        logarithmic=logarithmic,
        position_u=position,
        width_u=np.clip(width, 0.5 * step, span),
        position_low=np.maximum(np.array([s.low_u for s in placed]), edges[0] - width),
        position_high=np.minimum(np.array([s.high_u for s in placed]), edges[-1] + width),
        width_low=np.full(len(placed), 0.3 * step),
        width_high=np.full(len(placed), span),
        fixed_position=np.array([s.fixed for s in placed], bool),
        fixed_width=np.array([s.fixed_width for s in placed], bool),
        position_tie=settings.tie,
        equal_relative_widths=settings.equal_relative_widths,
        multiples=_multiples(placed, tied),
        tied_position=tied,
        tied_width=np.array([s.tied_width for s in placed], bool),
        template=rebinned(template[first:last], merge) if len(template) else template,
    )


def _multiples(starts: list[Start], tied: npt.NDArray[np.bool_]) -> Floats:
    """Return which multiple each peak is: as the user says, else 1, 2, 3 ... among those that are tied."""
    rank = np.cumsum(tied)
    return np.array([start.multiple or max(float(at), 1.0) for start, at in zip(starts, rank, strict=True)])


def is_logarithmic(grid: Grid, settings: PeakSettings) -> bool:
    """Return whether the axis of the fit is logarithmic."""
    return (grid.axis if settings.axis == "as_histogram" else settings.axis) == "logarithmic"


def _on_axis(start: Start, grid: Grid, logarithmic: bool) -> Start:
    """Return a start on the axis of the fit, where that is not the axis of the histogram."""
    if logarithmic == (grid.axis == "logarithmic"):
        return start
    if logarithmic:
        position = np.log10(start.position_u)
        low, high = (np.log10(max(bound, 1e-300)) if bound > 0 else -np.inf for bound in (start.low_u, start.high_u))
        width = start.width_u / start.position_u / np.log(10)
    else:
        position, low, high = (10.0**value for value in (start.position_u, start.low_u, start.high_u))
        width = start.width_u * position * np.log(10)
    return replace(start, position_u=float(position), width_u=float(width), low_u=float(low), high_u=float(high))

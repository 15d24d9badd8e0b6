"""Which stretch of the axis each group of peaks is fitted on."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter1d

from meseta.histograms.results import ConductanceHistogram, Grid
from meseta.peaks.candidates import Candidate
from meseta.recipe.peaks import PeakSettings, PeakStart
from meseta.segmentation.results import NoiseModel

__all__ = ["Floor", "Start", "Window", "rebinned", "starts_of", "to_axis", "usable_range", "windows_of"]

Floats = npt.NDArray[np.float64]

_REACH = 4.0
_FLOOR_SIGMAS = 6.0


@dataclass(frozen=True)
class Floor:
    """Reading with the contact open, in G0: mean and standard deviation of a sample."""

    mean_g0: float
    sigma_g0: float

    @classmethod
    def of(cls, noise: NoiseModel) -> Floor | None:
        """Return the floor of a noise model; None where no trace was shown to reach it."""
        return cls(noise.floor_g0, noise.floor_sigma_g0) if noise.floor_traces else None


@dataclass(frozen=True)
class Start:
    """One peak to fit: starting values on the axis, and what the user said about it.

    ``least_u`` is the smallest width that sets the length of the fit range: of a proposed peak, so that the range does
    not close in on a lump of it; ``broader`` are the position and width of wider hills that it is part of.
    """

    position_u: float
    width_u: float
    name: str = ""
    low_u: float = -np.inf
    high_u: float = np.inf
    fixed: bool = False
    fixed_width: bool = False
    multiple: float | None = None
    tied: bool = True
    tied_width: bool = True
    least_u: float = 0.0
    broader: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True)
class Window:
    """A stretch of bins, and the peaks fitted on it.

    Attributes
    ----------
    first, last : int
        Half-open range of bins.
    starts : tuple of Start
        Sorted by position.
    """

    first: int
    last: int
    starts: tuple[Start, ...]


def to_axis(conductance_g0: float, logarithmic: bool) -> float:
    """Return a conductance on the axis: log10 G, or G itself."""
    return float(np.log10(conductance_g0)) if logarithmic else float(conductance_g0)


def usable_range(histogram: ConductanceHistogram, floor: Floor | None) -> tuple[float, float]:
    """Return the range of the axis in which a peak may lie: from clear above the floor to the upper end.

    The floor is a peak of the histogram too, and no conductance of a contact.  Where it is not given, it is looked for
    at the lower end of a logarithmic axis.
    """
    grid = histogram.grid
    u, logarithmic = grid.u_edges, grid.axis == "logarithmic"
    low = float(u[0])
    if floor is not None and np.isfinite([floor.mean_g0, floor.sigma_g0]).all():
        top = floor.mean_g0 + _FLOOR_SIGMAS * floor.sigma_g0
        if top > 0 or not logarithmic:
            low = max(low, to_axis(top, logarithmic))
    elif logarithmic:
        low = max(low, _floor_edge(u, histogram.counts.astype(float)))
    return low, float(u[-1])


def _floor_edge(u: Floats, counts: Floats) -> float:
    """Return the upper end of a floor peak at the lower end of the axis, or the lowest edge where there is none.

    A floor peak is the highest point of the lowest 1.3 decades of what was counted, and is followed by a fall (a factor
    of ten within a decade) that is much steeper than its top, other than that of an exponential background; it ends
    where the fall gives way.
    """
    step = float(u[1] - u[0])
    seen = np.flatnonzero(counts)
    if len(seen) < 8 or step >= 0.2:
        return float(u[0])
    smooth = gaussian_filter1d(counts, max(0.1 / step, 1.0))
    top = int(np.argmax(smooth[: seen[0] + round(1.3 / step)]))
    decade, pause = round(1.0 / step), max(round(0.15 / step), 1)
    fall = np.log10(np.maximum(smooth[top:], 1e-9 * smooth[top]) / smooth[top])
    if fall[: decade + 1].min() > -1.0:
        return float(u[0])
    slope = np.gradient(fall, step)
    steepest = int(np.argmin(slope[: decade + 1]))
    if slope[: pause + 1].mean() < 0.5 * slope[steepest]:
        return float(u[0])
    gentle = np.convolve((slope[steepest:] > -0.7).astype(float), np.ones(pause), "valid") >= pause
    ends = np.flatnonzero(gentle)
    return float(u[top + steepest + int(ends[0])]) if len(ends) else float(u[0])


def starts_of(settings: PeakSettings, grid: Grid) -> list[Start]:
    """Return the peaks that the user asks for, sorted by position."""
    return sorted((_asked(peak, grid) for peak in settings.peaks), key=lambda start: start.position_u)


def _asked(peak: PeakStart, grid: Grid) -> Start:
    logarithmic = grid.axis == "logarithmic"
    position = to_axis(peak.position_g0, logarithmic)
    default = 0.15 if logarithmic else 0.1 * max(peak.position_g0, 0.02 * grid.edges_g0[-1])
    return Start(
        position,
        default if peak.width is None else peak.width,
        peak.name,
        -np.inf if peak.low_g0 is None else to_axis(peak.low_g0, logarithmic),
        np.inf if peak.high_g0 is None else to_axis(peak.high_g0, logarithmic),
        peak.fixed,
        peak.fixed_width,
        peak.multiple,
        peak.tied,
        peak.tied_width,
    )


def windows_of(
    starts: Sequence[Start],
    grid: Grid,
    usable: tuple[float, float],
    settings: PeakSettings,
    others: Sequence[Candidate] = (),
) -> list[Window]:
    """Return the stretches on which the peaks are fitted, each with its own background.

    Peaks whose surroundings (4 widths to either side) overlap share a stretch.  A stretch ends half-way to a peak that
    is not fitted, at the ends of the usable range, and where the user says.
    """
    if not starts:
        return []
    logarithmic = grid.axis == "logarithmic"
    low = usable[0] if settings.fit_low_g0 is None else to_axis(settings.fit_low_g0, logarithmic)
    high = usable[1] if settings.fit_high_g0 is None else to_axis(settings.fit_high_g0, logarithmic)
    together = settings.fit_low_g0 is not None or settings.fit_high_g0 is not None
    bound = _between_tied(starts, settings)
    groups: list[list[Start]] = [[starts[0]]]
    for place, start in enumerate(starts[1:]):
        last = groups[-1][-1]
        if together or bound[place] or start.position_u - last.position_u < _REACH * (start.width_u + last.width_u):
            groups[-1].append(start)
        else:
            groups.append([start])
    windows = []
    for group in groups:
        bottom = low if settings.fit_low_g0 is not None else max(low, group[0].position_u - _REACH * group[0].width_u)
        top = high if settings.fit_high_g0 is not None else min(high, group[-1].position_u + _REACH * group[-1].width_u)
        for other in others:
            if any(abs(other.position_u - s.position_u) < 1.5 * (s.width_u + other.width_u) for s in group):
                continue
            if other.position_u < group[0].position_u and settings.fit_low_g0 is None:
                bottom = max(bottom, (other.position_u + group[0].position_u) / 2)
            if other.position_u > group[-1].position_u and settings.fit_high_g0 is None:
                top = min(top, (other.position_u + group[-1].position_u) / 2)
        windows.append(Window(*_bins(grid, bottom, top), tuple(group)))
    return windows


def _between_tied(starts: Sequence[Start], settings: PeakSettings) -> list[bool]:
    """Return for each peak but the last whether a tie spans it and its upper neighbour: such are fitted together."""
    spanned = [False] * max(len(starts) - 1, 0)
    ties = [
        [place for place, start in enumerate(starts) if start.tied and settings.tie != "none"],
        [place for place, start in enumerate(starts) if start.tied_width and settings.equal_relative_widths],
    ]
    for places in ties:
        for place in range(places[0], places[-1]) if places else ():
            spanned[place] = True
    return spanned


def _bins(grid: Grid, bottom: float, top: float) -> tuple[int, int]:
    """Return the half-open range of whole bins inside [bottom, top]; a little rounding is forgiven."""
    u = grid.u_edges
    slack = 1e-6 * (u[1] - u[0])
    first = int(np.searchsorted(u, bottom - slack, side="left"))
    last = int(np.searchsorted(u, top + slack, side="right")) - 1
    return min(first, grid.bins), max(min(last, grid.bins), min(first, grid.bins))


def rebinned(values: Floats, merge: int) -> Floats:
    """Return sums of ``merge`` neighbouring bins along the last axis; a rest at the upper end is left out."""
    bins = values.shape[-1] // merge
    return values[..., : bins * merge].reshape(*values.shape[:-1], bins, merge).sum(axis=-1)

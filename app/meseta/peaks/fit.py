"""The peak fit of a histogram, from starting values to the table."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.histograms.results import ConductanceHistogram, CountMatrix, Grid, Resampling
from meseta.peaks.candidates import Candidate, find_candidates
from meseta.peaks.fitting import fit_model, refit
from meseta.peaks.model import Model
from meseta.peaks.proposal import block_counts, number_of_peaks
from meseta.peaks.results import PeakFit
from meseta.peaks.systematic import systematic_shifts
from meseta.peaks.tabulate import FittedWindow, empty_fit, tabulate
from meseta.peaks.windows import Start, Window, rebinned, starts_of, usable_range, windows_of
from meseta.recipe.peaks import PeakSettings
from meseta.segmentation.results import PlateauTable
from meseta.work import Work

__all__ = ["fit_histogram"]

Floats = npt.NDArray[np.float64]

_LEAST_SHARE = 0.03


def fit_histogram(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    resampling: Resampling | None = None,
    counts: CountMatrix | None = None,
    plateaus: PlateauTable | None = None,
    work: Work | None = None,
    *,
    floor_g0: float | None = None,
    floor_sigma_g0: float | None = None,
    template: npt.ArrayLike | None = None,
) -> PeakFit:
    """Fit the peaks of a histogram.

    Parameters
    ----------
    histogram : ConductanceHistogram
    settings : PeakSettings
    resampling : Resampling, optional
        Without it there are no intervals, and ``status`` says so.
    counts : CountMatrix, optional
        Needed to propose the number of peaks from traces left out.
    plateaus : PlateauTable, optional
        Plateaus of the selected traces, for the median plateau conductance beside the fit.
    work : Work, optional
    floor_g0, floor_sigma_g0 : float, optional
        Mean and standard deviation of the reading with the contact open: no peak is sought there.
    template : (bins,) array_like, optional
        Counts of a blank recording or a mean tunnelling trace on the histogram's grid, for those backgrounds.

    Returns
    -------
    PeakFit

    Raises
    ------
    CallError
        Where a background needs a template and none is at hand.
    """
    work = work or Work()
    shape = _template(histogram, settings, counts, plateaus, template)
    usable = usable_range(histogram, floor_g0, floor_sigma_g0)
    task = _Task(histogram, settings, resampling, counts, usable, shape)
    windows, reason = task.windows()
    if not windows:
        return empty_fit(histogram, settings, reason)
    parts = []
    for window in windows:
        work.check()
        fitted = fit_model(task.model(window), task.data(window))
        replicates = (
            None if resampling is None else refit(fitted, resampling.counts[:, window.first : window.last], work)
        )
        parts.append(
            FittedWindow(window, fitted, replicates, systematic_shifts(fitted, task.wide_model, window, histogram))
        )
    return tabulate(histogram, settings, parts, resampling, plateaus)


@dataclass(frozen=True)
class _Task:
    """What one fit works on."""

    histogram: ConductanceHistogram
    settings: PeakSettings
    resampling: Resampling | None
    counts: CountMatrix | None
    usable: tuple[float, float]
    template: Floats

    def data(self, window: Window) -> Floats:
        """Return the counts of a window."""
        return self.histogram.counts[window.first : window.last].astype(float)

    def model(self, window: Window) -> Model:
        """Return the model of a window with the settings' shape, background and ties."""
        return self.wide_model(window, window.first, window.last, 1, self.settings.background)

    def wide_model(self, window: Window, first: int, last: int, merge: int, background: str) -> Model:
        """Return the model of a window over another range of bins, merged, with another background."""
        return model_of(
            self.histogram.grid, self.settings, window.starts, (first, last), merge, background, self.template
        )

    def windows(self) -> tuple[list[Window], str]:
        """Return where to fit what, or why nothing can be fitted."""
        grid = self.histogram.grid
        if grid.bins < 8:
            return [], f"no fit: {grid.bins} bins are too few"
        if not self.histogram.counts.any():
            return [], "no fit: the histogram is empty"
        found = self._found()
        starts = starts_of(self.settings, found, grid)
        if self.settings.peaks:
            windows = windows_of(starts, grid, self.usable, self.settings)
            return self._fittable(windows)
        if not starts:
            return [], "no peak found"
        return self._fittable(self._proposed(found))

    def _found(self) -> list[Candidate]:
        if self.settings.peaks:
            return []
        grid = self.histogram.grid
        u = grid.u_edges
        low, high = self.usable
        logarithmic = grid.axis == "logarithmic"
        if self.settings.fit_low_g0 is not None:
            low = max(low, np.log10(self.settings.fit_low_g0) if logarithmic else self.settings.fit_low_g0)
        if self.settings.fit_high_g0 is not None:
            high = min(high, np.log10(self.settings.fit_high_g0) if logarithmic else self.settings.fit_high_g0)
        found = find_candidates(
            (u[1:] + u[:-1]) / 2,
            self.histogram.counts,
            self.histogram.traces_in_bin,
            None if self.resampling is None else self.resampling.counts,
            (float(low), float(high)),
            logarithmic,
        )
        return [candidate for candidate in found if candidate.share >= _LEAST_SHARE]

    def _proposed(self, found: list[Candidate]) -> list[Window]:
        """Return windows with as many of the found peaks as left-out traces support."""
        grid, settings = self.histogram.grid, self.settings
        ranked = sorted(found, key=lambda candidate: -candidate.curvature)[: settings.most]
        blocks = self._blocks()
        while True:
            chosen = sorted(ranked, key=lambda candidate: candidate.position_u)
            others = [candidate for candidate in found if candidate not in ranked]
            windows = windows_of(starts_of(settings, chosen, grid), grid, self.usable, settings, others)
            if blocks is None:
                return windows
            kept = [start for window in windows for start in self._supported(window, blocks, ranked)]
            if len(kept) == len(ranked):
                return windows
            ranked = [c for c in ranked if any(c.position_u == start.position_u for start in kept)]
            if not ranked:
                return []

    def _supported(self, window: Window, blocks: Floats, ranked: list[Candidate]) -> list[Start]:
        if window.last - window.first < 8:
            return []
        place = {candidate.position_u: rank for rank, candidate in enumerate(ranked)}
        order = sorted(window.starts, key=lambda start: place[start.position_u])
        plain = replace_settings(self.settings)
        models = [
            model_of(
                self.histogram.grid,
                plain,
                tuple(sorted(order[:number], key=lambda start: start.position_u)),
                (window.first, window.last),
                1,
                plain.background,
                self.template,
            )
            for number in range(len(order) + 1)
        ]
        return order[: number_of_peaks(blocks[:, window.first : window.last], models)]

    def _blocks(self) -> Floats | None:
        if self.counts is None:
            return None
        rows = np.flatnonzero(self.counts.used) if self.resampling is None else self.resampling.rows
        if len(rows) < 20:
            return None
        blocks = rebinned(block_counts(self.counts.counts, rows), self.counts.merge)
        return blocks if blocks.shape[1] == self.histogram.grid.bins else None

    def _fittable(self, windows: list[Window]) -> tuple[list[Window], str]:
        good = [
            window
            for window in windows
            if window.last - window.first >= 8 and self.histogram.counts[window.first : window.last].any()
        ]
        return good, "" if good else "no fit: fewer than 8 bins with counts in the range of the fit"


def replace_settings(settings: PeakSettings) -> PeakSettings:
    """Return the settings without ties: a tie needs all its peaks, a proposal takes them one by one."""
    return settings.model_copy(update={"tie": "none", "equal_relative_widths": False})


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
    logarithmic = _logarithmic(grid, settings)
    edges_g0 = grid.edges_g0[first : last + 1 : merge]
    edges = np.log10(edges_g0) if logarithmic else edges_g0
    placed = [_on_axis(start, grid, logarithmic) for start in starts]
    position, width = np.array([s.position_u for s in placed]), np.array([s.width_u for s in placed])
    span, step = float(edges[-1] - edges[0]), float(np.diff(edges).min())
    numbers = np.array([start.multiple or rank + 1.0 for rank, start in enumerate(starts)])
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
        multiples=numbers,
        template=rebinned(template[first:last], merge) if len(template) else template,
    )


def _logarithmic(grid: Grid, settings: PeakSettings) -> bool:
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


def _template(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    counts: CountMatrix | None,
    plateaus: PlateauTable | None,
    template: npt.ArrayLike | None,
) -> Floats:
    """Return the shape of a template background, an empty array where none is wanted."""
    if settings.background == "template":
        if template is None or np.shape(template) != histogram.counts.shape:
            raise CallError(
                "the background 'template' needs a shape on the histogram's bins",
                "peaks.background",
                "give the counts of a blank recording, or choose another background",
            )
        return np.ascontiguousarray(template, float)
    if settings.background != "tunnelling":
        return np.empty(0)
    if template is not None:
        return np.ascontiguousarray(template, float)
    if counts is None or plateaus is None:
        raise CallError(
            "the background 'tunnelling' is made of the traces without a plateau, and a histogram alone has none",
            "peaks.background",
            "fit from the traces, or choose another background",
        )
    bare = counts.used.copy()
    bare[plateaus.trace[plateaus.kind == "molecule"]] = False
    shape: Floats = rebinned(counts.counts[bare].sum(axis=0, dtype=np.int64).astype(float), counts.merge)
    if not shape.any() or len(shape) != len(histogram.counts):
        raise CallError(
            "no trace is without a plateau", "peaks.background", "choose another background than 'tunnelling'"
        )
    return shape

"""Which peaks are fitted, and on which stretch of the axis: asked for by the user, or proposed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import ConductanceHistogram, CountMatrix, Resampling
from meseta.peaks.candidates import Candidate, find_candidates
from meseta.peaks.fitting import Fitted, fit_model
from meseta.peaks.model import WIDTH_TO_FWHM, Model
from meseta.peaks.modelling import model_of
from meseta.peaks.parting import parted
from meseta.peaks.proposal import block_counts, held_out_gain
from meseta.peaks.windows import Start, Window, rebinned, starts_of, to_axis, windows_of
from meseta.recipe.peaks import PeakSettings
from meseta.typeset import conductance

__all__ = ["Chooser"]

Floats = npt.NDArray[np.float64]

_FEWEST_BINS = 8
_LEAST_SHARE = 0.03
_LEAST_HEIGHT = 0.2
_SUB_QUANTUM_G0 = 0.4
_SUB_QUANTUM_FWHM = 0.1
_ROUNDS = 4
_LEAST_PART = 0.02
_CONTACT_G0 = 0.75
_LEAST_REACH = 0.7
_FEW = 100


@dataclass(frozen=True)
class Chooser:
    """What is known when peaks are chosen.

    Attributes
    ----------
    usable : (float, float)
        Range of the axis in which a peak may lie.
    template : (bins,) float64
        Shape of a template background; empty where there is none.
    """

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
        return self.varied(window, window.first, window.last, 1, self.settings.background)

    def varied(self, window: Window, first: int, last: int, merge: int, background: str) -> Model:
        """Return the model of a window over another range of bins, merged, with another background."""
        grid, settings = self.histogram.grid, self.settings
        return model_of(grid, settings, window.starts, (first, last), merge, background, self.template)

    def windows(self) -> tuple[list[Window], str, tuple[str, ...]]:
        """Return where to fit what; why nothing can be fitted; and what a reader must know of peaks left unfitted."""
        grid = self.histogram.grid
        if grid.bins < _FEWEST_BINS:
            return [], f"no fit: {grid.bins} bins are too few", ()
        if not self.histogram.counts.any():
            return [], "no fit: the histogram is empty", ()
        beyond: tuple[str, ...] = ()
        if self.settings.peaks:
            windows = self._settled(starts_of(self.settings, grid), [])
        else:
            windows, beyond = self._proposed(self._found())
            if not windows:
                return [], "no peak found", ()
        good = [window for window in windows if self._fittable(window)]
        reason = "" if good else f"no fit: fewer than {_FEWEST_BINS} bins with counts in the range of the fit"
        lone = tuple(
            f"the peak asked for near {self._stated(start.position_u)} is not fitted: fewer than {_FEWEST_BINS} bins "
            "with counts lie around it"
            for window in windows
            if self.settings.peaks and window not in good
            for start in window.starts
        )
        return good, reason, (*beyond, *lone)

    def without(self, windows: Sequence[Window], left_out: Start) -> list[Window]:
        """Return windows when one peak is left out: its next wider view takes its place, where there is one.

        What proves too weak alone may be a lump of a wider peak, which then takes in the others within its width.
        """
        rest = [start for window in windows for start in window.starts if start != left_out]
        if left_out.broader:
            position, width = left_out.broader[0]
            wider = Start(position, width, least_u=_LEAST_REACH * width, broader=left_out.broader[1:])
            rest = sorted([s for s in rest if abs(s.position_u - position) > width] + [wider], key=_place)
        return [window for window in self._settled(rest, []) if self._fittable(window)] if rest else []

    def _fittable(self, window: Window) -> bool:
        return window.last - window.first >= _FEWEST_BINS and bool(self.data(window).any())

    def _found(self) -> list[Candidate]:
        """Return the places that look like peaks, those that hold the most samples of their own first.

        From about one quantum on those that hold a fair part come in the order of conductance: contacts are thinned
        step by step, and where the openings begin every trace leaves samples.
        """
        u, settings = self.histogram.grid.u_edges, self.settings
        logarithmic = self.histogram.grid.axis == "logarithmic"
        low, high = self.usable
        if settings.fit_low_g0 is not None:
            low = max(low, to_axis(settings.fit_low_g0, logarithmic))
        if settings.fit_high_g0 is not None:
            high = min(high, to_axis(settings.fit_high_g0, logarithmic))
        found = find_candidates(
            (u[1:] + u[:-1]) / 2,
            self.histogram.counts,
            self.histogram.traces_in_bin,
            None if self.resampling is None else self.resampling.counts,
            (low, high),
            logarithmic,
            self.histogram.traces,
        )
        large = [place for place in found if place.share >= _LEAST_SHARE]
        metal = [place for place in large if self._g0(place.position_u) >= _CONTACT_G0]
        least = _LEAST_PART * max((place.own * place.share for place in metal), default=0.0)
        first = sorted((p for p in metal if p.own * p.share >= least), key=lambda place: place.position_u)
        return [*first, *sorted((p for p in large if p not in first), key=lambda place: -place.own * place.share)]

    def _proposed(self, found: Sequence[Candidate]) -> tuple[list[Window], tuple[str, ...]]:
        """Return windows with those of the found peaks that left-out traces support, one after the other.

        What would be supported too, but for the largest number of peaks, is told.
        """
        blocks = self.blocks()
        chosen: list[Start] = []
        windows: list[Window] = []
        standing, full = list(found), []
        for place in found:
            if not self._room_for(place.position_u, chosen):
                full.append(place)
                continue
            taken = False
            views = ((place.position_u, place.width_u), *place.broader)
            for number, (position, width) in enumerate(views):
                new = Start(position, width, least_u=_LEAST_REACH * width, broader=views[number + 1 :])
                trial = sorted([*chosen, new], key=_place)
                settled = self._settled(trial, standing)
                window = next((w for w in settled if any(_same(start, new) for start in w.starts)), None)
                if window is not None and self._supported(window, new, blocks):
                    chosen, windows, taken = trial, settled, True
                    break
            if not taken:
                standing.remove(place)  # what is no peak keeps no room
                windows = self._settled(chosen, standing) if chosen else []
        beyond = tuple(
            self._unfitted(place) for place in full if self._would_be_supported(place, chosen, standing, blocks)
        )
        return (windows if blocks is None else self._parted(windows, standing, blocks)), beyond

    def _would_be_supported(
        self, place: Candidate, chosen: Sequence[Start], standing: Sequence[Candidate], blocks: Floats | None
    ) -> bool:
        new = Start(place.position_u, place.width_u, least_u=_LEAST_REACH * place.width_u)
        settled = self._settled(sorted([*chosen, new], key=_place), standing)
        window = next((w for w in settled if any(_same(start, new) for start in w.starts)), None)
        return window is not None and self._supported(window, new, blocks)

    def _unfitted(self, place: Candidate) -> str:
        return (
            f"a further peak near {self._stated(place.position_u)} is not fitted: at most {self.settings.most} are "
            "proposed on either side of 0.4 G0 (peaks.most)"
        )

    def not_proposed(self, dropped: Sequence[Start], windows: Sequence[Window]) -> tuple[str, ...]:
        """Return in words what looked like a peak and was not proposed in the end, unless a fitted one stands there."""
        standing = [start for window in windows for start in window.starts]
        lone = [
            start
            for number, start in enumerate(dropped)
            if all(abs(start.position_u - s.position_u) > start.width_u + s.width_u for s in standing)
            and not any(abs(start.position_u - later.position_u) <= later.width_u for later in dropped[number + 1 :])
        ]
        return tuple(
            f"what looks like a peak near {self._stated(start.position_u)} is not proposed: its area is below three "
            "standard errors, or no plateaus lie there; ask for it in peaks.peaks to see it fitted"
            for start in lone
        )

    def _room_for(self, place_u: float, chosen: Sequence[Start]) -> bool:
        """Return whether fewer than the most peaks are chosen on this side of the quantum."""
        below = self._below_quantum(place_u)
        return sum(self._below_quantum(start.position_u) == below for start in chosen) < self.settings.most

    def _parted(self, windows: list[Window], standing: Sequence[Candidate], blocks: Floats) -> list[Window]:
        """Return the windows with peaks parted in two where left-out traces ask for it."""
        starts = [start for window in windows for start in window.starts]
        number = len(starts)
        for window in windows:
            for start in window.starts:
                if (
                    self._room_for(start.position_u, starts)
                    and (pair := parted(self, window, start, blocks)) is not None
                ):
                    starts = sorted([*(s for s in starts if s != start), *pair], key=_place)
        return windows if len(starts) == number else self._settled(starts, standing)

    def _stated(self, place_u: float) -> str:
        return conductance(self._g0(place_u), 2)

    def _g0(self, place_u: float) -> float:
        return 10.0**place_u if self.histogram.grid.axis == "logarithmic" else place_u

    def _below_quantum(self, place_u: float) -> bool:
        """Return whether a peak is a molecular one by its place; each side has its own largest number of peaks."""
        return place_u < to_axis(_SUB_QUANTUM_G0, self.histogram.grid.axis == "logarithmic")

    def _settled(self, starts: Sequence[Start], found: Sequence[Candidate]) -> list[Window]:
        """Return windows round the peaks as fitted: fit, move the windows, fit again, until they stand still."""
        grid, settings = self.histogram.grid, self.settings
        windows = windows_of(starts, grid, self.usable, settings, found)
        for _ in range(_ROUNDS):
            origins = [start for window in windows for start in window.starts]
            moved: list[Start] = []
            for window in windows:
                moved += self._moved(window) if self._fittable(window) else window.starts
            order = sorted(range(len(moved)), key=lambda at: moved[at].position_u)
            again = windows_of([moved[at] for at in order], grid, self.usable, settings, found)
            # every round begins where the first began
            first = iter([origins[at] for at in order])
            again = [replace(w, starts=tuple(next(first) for _ in w.starts)) for w in again]
            if [(w.first, w.last) for w in again] == [(w.first, w.last) for w in windows]:
                break
            windows = again
        return windows

    def _moved(self, window: Window) -> list[Start]:
        """Return the starts of a window moved to where the fit puts them, if that is near."""
        fitted = fit_model(self.model(window), self.data(window))
        same_axis = fitted.model.logarithmic == (self.histogram.grid.axis == "logarithmic")
        if not fitted.converged or not same_axis:
            return list(window.starts)
        moved = []
        for start, (_, position, width, _) in zip(window.starts, fitted.peaks, strict=True):
            near = abs(position - start.position_u) < 3.0 * start.width_u
            sane = 0.3 * start.width_u < width < 4.0 * start.width_u
            reach = max(float(width), start.least_u)
            moved.append(replace(start, position_u=float(position), width_u=reach) if near and sane else start)
        return moved

    def _supported(self, window: Window, new: Start, blocks: Floats | None) -> bool:
        """Return whether a further peak stands out, and foretells traces left out of the fit better than none."""
        if not self._fittable(window):
            return False
        settings = self.settings.model_copy(update={"tie": "none", "equal_relative_widths": False})
        bins = (window.first, window.last)
        background = settings.background
        larger = model_of(self.histogram.grid, settings, window.starts, bins, 1, background, self.template)
        fitted = fit_model(larger, self.data(window))
        if not all(self.stands_out(fitted, number) for number in range(len(window.starts))):
            return False
        if blocks is None:
            return True
        others = tuple(start for start in window.starts if not _same(start, new))
        smaller = model_of(self.histogram.grid, settings, others, bins, 1, background, self.template)
        gain = held_out_gain(blocks[:, window.first : window.last], smaller, larger)
        strict = min(self.histogram.traces / _FEW, 1.0)  # blocks of a trace or two say little; candidates were tested
        return gain.mean > strict * gain.error

    def stands_out(self, fitted: Fitted, number: int) -> bool:
        """Return whether a fitted peak is one: inside its range, narrower than it, no ripple on what is beneath."""
        _, position, width, _ = fitted.peaks[number]
        low, high = fitted.model.range_u
        if not fitted.converged or not low < position < high or width * WIDTH_TO_FWHM > 0.8 * (high - low):
            return False
        if abs(position - fitted.model.position_u[number]) > 2.0 * max(width, fitted.model.width_u[number]):
            return False
        curves = fitted.model.curves(fitted.inner)
        at = int(np.argmin(np.abs((fitted.model.low + fitted.model.high) / 2 - position)))
        own = curves.components[number][at]
        if own < _LEAST_HEIGHT * (curves.total[at] - own):
            return False
        narrow = fitted.model.logarithmic and position < np.log10(_SUB_QUANTUM_G0)
        return not (narrow and width * WIDTH_TO_FWHM < _SUB_QUANTUM_FWHM)

    def reached(self, window: Window, fitted: Fitted) -> list[int]:
        """Return how many traces have a sample within two widths of each peak; what one bin shows where unknown."""
        model = fitted.model
        middle = (model.low + model.high) / 2
        inside = [np.abs(middle - position) <= 2.0 * width for position, width in fitted.peaks[:, 1:3]]
        matrix, rows = self.counts, self._rows()
        if matrix is None or matrix.shown.bins != self.histogram.grid.bins:
            here = self.histogram.traces_in_bin[window.first : window.last]
            return [int(here[near].max(initial=0)) for near in inside]
        fine = slice(window.first * matrix.merge, window.last * matrix.merge)
        seen = matrix.counts[rows, fine] > 0
        return [int(seen[:, np.repeat(near, matrix.merge)].any(axis=1).sum()) for near in inside]

    def _rows(self) -> npt.NDArray[np.int64]:
        """Return the traces that take part, in order; none where traces are not known."""
        if self.resampling is not None:
            return self.resampling.rows
        return np.empty(0, np.int64) if self.counts is None else np.flatnonzero(self.counts.used)

    def blocks(self, number: int = 10) -> Floats | None:
        """Return the counts of blocks of consecutive traces on the histogram's bins, if traces are known."""
        if self.counts is None:
            return None
        rows = self._rows()
        if len(rows) < 20:
            return None
        blocks = rebinned(block_counts(self.counts.counts, rows, number), self.counts.merge)
        return blocks if blocks.shape[1] == self.histogram.grid.bins else None


def _place(start: Start) -> float:
    return start.position_u


def _same(start: Start, other: Start) -> bool:
    return start.position_u == other.position_u

"""A model of a histogram: which peaks, which background, what is tied, and where every number may lie."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.peaks import kernels

__all__ = ["BACKGROUNDS", "SHAPES", "WIDTH_TO_FWHM", "Curves", "Model"]

Floats = npt.NDArray[np.float64]

SHAPES: Final = tuple(kernels.SHAPE_CODES)
BACKGROUNDS: Final = tuple(kernels.BACKGROUND_CODES)
WIDTH_TO_FWHM: Final = 2.0 * float(np.sqrt(2.0 * np.log(2.0)))
"""Full width at half maximum of a peak of unit width, for every shape."""

_POSITION_TIES: Final = {"none": 0, "multiples": 1, "ladder": 2}
_EXTRA_LIMITS: Final = {"pseudo_voigt": (0.0, 1.0, 0.5), "skewed_gaussian": (-0.9, 0.9, 0.0)}


@dataclass(frozen=True)
class Curves:
    """A model over the bins of a fit, in counts a bin.

    Attributes
    ----------
    total, background : (bins,) float64
    components : (peaks, bins) float64
    """

    total: Floats
    background: Floats
    components: Floats


@dataclass(frozen=True)
class Model:
    """What is fitted, on the axis u (log10 G or G) of the histogram.

    Attributes
    ----------
    shape, background : str
        One of :data:`SHAPES`, :data:`BACKGROUNDS`.  All shapes have closed bin integrals: Gaussian, Lorentzian, their
        weighted sum (pseudo-Voigt), and the two-piece normal (Fechner; Wallis, Statist. Sci. 29, 106 (2014)), whose
        position is its mode.
    low, high : (bins,) float64
        Bin edges on the axis.
    logarithmic : bool
    position_u, width_u : (peaks,) float64
        Starting values; ``width_u`` is FWHM / 2.3548.
    position_low, position_high, width_low, width_high : (peaks,) float64
        Bounds.
    fixed_position, fixed_width : (peaks,) bool
    position_tie : str
        "none"; "multiples": every position is a multiple of one conductance; "ladder": the same behind a series
        resistance.
    equal_relative_widths : bool
    multiples : (peaks,) float64
        Which multiple each peak is.
    template : (bins,) float64
        Shape of a "template" background (a blank recording, a mean tunnelling trace); its scale is fitted.
    """

    shape: str
    background: str
    low: Floats
    high: Floats
    logarithmic: bool
    position_u: Floats
    width_u: Floats
    position_low: Floats
    position_high: Floats
    width_low: Floats
    width_high: Floats
    fixed_position: npt.NDArray[np.bool_]
    fixed_width: npt.NDArray[np.bool_]
    position_tie: str = "none"
    equal_relative_widths: bool = False
    multiples: Floats = field(default_factory=lambda: np.empty(0))
    template: Floats = field(default_factory=lambda: np.empty(0))

    @property
    def peaks(self) -> int:
        """Number of peaks."""
        return len(self.position_u)

    @property
    def size(self) -> int:
        """Number of parameters, free or not: four a peak and two of the background."""
        return 4 * self.peaks + 2

    @property
    def range_u(self) -> tuple[float, float]:
        """Lower and upper end of the fit on the axis."""
        return float(self.low[0]), float(self.high[-1])

    def layout(self, least_squares: bool = False) -> npt.NDArray[np.int64]:
        """Return the codes that the kernels want."""
        return np.array(
            [
                kernels.SHAPE_CODES[self.shape],
                kernels.BACKGROUND_CODES[self.background],
                self.peaks,
                _POSITION_TIES[self.position_tie] if self.peaks else 0,
                int(self.equal_relative_widths and self.peaks > 0),
                int(self.logarithmic),
                kernels.LEAST_SQUARES if least_squares else kernels.LIKELIHOOD,
            ],
            np.int64,
        )

    def numbers(self) -> Floats:
        """Return the multiples, 1, 2, 3 ... where none were given."""
        return self.multiples if len(self.multiples) == self.peaks else np.arange(1.0, self.peaks + 1)

    def template_counts(self) -> Floats:
        """Return the template, ones where there is none."""
        return self.template if len(self.template) == len(self.low) else np.ones(len(self.low))

    def free(self) -> npt.NDArray[np.int64]:
        """Return the indices of the free parameters."""
        chosen = np.zeros(self.size, bool)
        for peak in range(self.peaks):
            chosen[4 * peak] = True
            chosen[4 * peak + 1] = not self.fixed_position[peak] and (
                self.position_tie == "none" or peak == 0 or (self.position_tie == "ladder" and peak == 1)
            )
            chosen[4 * peak + 2] = not self.fixed_width[peak] and (not self.equal_relative_widths or peak == 0)
            chosen[4 * peak + 3] = self.shape in _EXTRA_LIMITS
        count = {"none": 0, "constant": 1, "template": 1}.get(self.background, 2)
        chosen[4 * self.peaks : 4 * self.peaks + count] = True
        return np.flatnonzero(chosen)

    def bounds(self) -> tuple[Floats, Floats]:
        """Return lower and upper bounds of every parameter."""
        lower, upper = np.full(self.size, -np.inf), np.full(self.size, np.inf)
        lower[0:-2:4] = 0.0
        lower[1:-2:4], upper[1:-2:4] = self.position_low, self.position_high
        lower[2:-2:4], upper[2:-2:4] = self.width_low, self.width_high
        if self.shape in _EXTRA_LIMITS:
            lower[3:-2:4], upper[3:-2:4] = _EXTRA_LIMITS[self.shape][:2]
        lower[-2] = 0.0
        if self.background == "linear":
            lower[-1] = 0.0
        elif self.background in ("exponential", "power_law"):
            lower[-1], upper[-1] = -60.0, 60.0
        self._tied_bounds(lower, upper)
        return lower, upper

    def _tied_bounds(self, lower: Floats, upper: Floats) -> None:
        """Widen the bounds of parameters that a tie uses for something else."""
        if self.peaks and self.position_tie != "none":
            first, last = self.range_u
            number = self.numbers()
            if self.logarithmic:
                lower[1], upper[1] = first - np.log10(number.max()), last - np.log10(number.min()) + 1.0
            else:
                lower[1], upper[1] = max(first, 0.0) / number.max(), 2.0 * last / number.min()
            if self.position_tie == "ladder" and self.peaks > 1:
                top = 10.0**last if self.logarithmic else last
                lower[5], upper[5] = -0.5 / top, 0.95 / top
        if self.peaks and self.equal_relative_widths and not self.logarithmic:
            lower[2], upper[2] = 1e-4, 2.0

    def start(self, counts: Floats) -> Floats:
        """Return starting values for these counts: a background from the quiet bins, areas from what lies above it."""
        inner = np.zeros(self.size)
        inner[1:-2:4], inner[2:-2:4] = self.position_u, self.width_u
        inner[3:-2:4] = _EXTRA_LIMITS.get(self.shape, (0, 0, 0.0))[2]
        inner[-2:] = self._background_start(counts)
        flat = replace(self, position_tie="none", equal_relative_widths=False)
        under = flat.curves(inner).background
        middle, width = (self.low + self.high) / 2, self.high - self.low
        for peak in range(self.peaks):
            near = np.abs(middle - self.position_u[peak]) <= np.maximum(self.width_u[peak], width)
            height = max(float(np.mean((counts - under)[near] / width[near])), 0.0) if near.any() else 0.0
            spare = 0.02 * float(counts.sum()) / max(self.peaks, 1)
            inner[4 * peak] = max(height * self.width_u[peak] * np.sqrt(2 * np.pi), spare)
        self._tie_start(inner)
        lower, upper = self.bounds()
        return np.clip(inner, lower, upper)

    def _tie_start(self, inner: Floats) -> None:
        if not self.peaks:
            return
        if self.position_tie != "none":
            number = self.numbers()
            each = self.position_u - np.log10(number) if self.logarithmic else self.position_u / number
            inner[1] = float(np.median(each))
            if self.position_tie == "ladder" and self.peaks > 1:
                inner[5] = 0.0
        if self.equal_relative_widths:
            inner[2] = float(np.median(self.width_u if self.logarithmic else self.width_u / self.position_u))

    def _background_start(self, counts: Floats) -> Floats:
        """Return a start of the background's two numbers from a lower quantile of the ends of the range."""
        width = self.high - self.low
        density = counts / width
        third = max(len(counts) // 5, 1)
        ends = np.array([np.quantile(density[:third], 0.3), np.quantile(density[-third:], 0.3)])
        if self.background in ("none", "template"):
            scale = float(np.quantile(counts / np.maximum(self.template_counts(), 1e-300), 0.3))
            return np.array([scale if self.background == "template" else 0.0, 0.0])
        if self.background == "constant":
            return np.array([float(ends.min()), 0.0])
        if self.background == "linear":
            return ends
        tiny = max(float(density.max()) * 1e-4, 1e-300)
        left, right = np.maximum(ends, tiny)
        first, last = self.range_u
        span = np.log(last / first) if self.background == "power_law" else 1.0
        return np.array([np.sqrt(left * right), np.log(left / right) / span * (1.0 - 2 / 10) ** -1])

    def curves(self, inner: Floats) -> Curves:
        """Return the model in counts a bin, and its parts, for parameters of the fit."""
        layout = self.layout()
        total, slopes, full, _ = kernels.expected_counts(
            layout, self.numbers(), self.low, self.high, self.template_counts(), np.ascontiguousarray(inner, float)
        )
        components = np.array([full[4 * peak] * slopes[:, 4 * peak] for peak in range(self.peaks)])
        components = components.reshape(self.peaks, len(self.low))
        return Curves(total, total - components.sum(axis=0), components)

    def unpacked(self, inner: Floats) -> Floats:
        """Return area, position, width and extra of every peak, shape (peaks, 4), for parameters of the fit."""
        _, _, full, _ = kernels.expected_counts(
            self.layout(), self.numbers(), self.low[:1], self.high[:1], np.ones(1), np.ascontiguousarray(inner, float)
        )
        return full[:-2].reshape(self.peaks, 4)

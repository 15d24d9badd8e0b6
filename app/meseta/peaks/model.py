"""A model of a histogram: which peaks, which background, what is tied, and where every number may lie."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.peaks import kernels, line_kernels

__all__ = ["BACKGROUNDS", "SHAPES", "WIDTH_TO_FWHM", "Curves", "Model"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]

SHAPES: Final = tuple(line_kernels.SHAPE_CODES)
BACKGROUNDS: Final = tuple(line_kernels.BACKGROUND_CODES)
WIDTH_TO_FWHM: Final = 2.0 * float(np.sqrt(2.0 * np.log(2.0)))
"""Full width at half maximum of a peak of unit width, for every shape."""

_STEEPEST: Final = 20.0
"""Most e-folds of an exponential background over the range of the fit, and largest power of a power law."""
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
        "none"; "multiples": the tied positions are multiples of one conductance; "ladder": the same behind a series
        resistance.  A tie of fewer than two peaks is none.
    equal_relative_widths : bool
        The tied widths are in proportion to the positions (equal on a logarithmic axis).
    multiples : (peaks,) float64
        Which multiple each peak is.
    tied_position, tied_width : (peaks,) bool
        Which peaks take part in the ties; all where empty.  A tied peak whose position is fixed holds the conductance
        that all are multiples of.
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
    fixed_position: Truths
    fixed_width: Truths
    position_tie: str = "none"
    equal_relative_widths: bool = False
    multiples: Floats = field(default_factory=lambda: np.empty(0))
    tied_position: Truths = field(default_factory=lambda: np.empty(0, bool))
    tied_width: Truths = field(default_factory=lambda: np.empty(0, bool))
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

    def tied_positions(self) -> Integers:
        """Return the peaks whose positions are tied to one another; none, or two and more."""
        return self._tied(self.tied_position) if self.position_tie != "none" else np.empty(0, np.int64)

    def tied_widths(self) -> Integers:
        """Return the peaks whose relative widths are equal; none, or two and more."""
        return self._tied(self.tied_width) if self.equal_relative_widths else np.empty(0, np.int64)

    def _tied(self, chosen: Truths) -> Integers:
        among = np.flatnonzero(chosen) if len(chosen) else np.arange(self.peaks)
        return among if len(among) > 1 else np.empty(0, np.int64)

    def layout(self, least_squares: bool = False) -> Integers:
        """Return the codes that the kernels want."""
        positions, widths = self.tied_positions(), self.tied_widths()
        flags = np.zeros(self.peaks, np.int64)
        flags[positions] |= line_kernels.POSITION_TIED
        flags[widths] |= line_kernels.WIDTH_TIED
        codes = [
            line_kernels.SHAPE_CODES[self.shape],
            line_kernels.BACKGROUND_CODES[self.background],
            self.peaks,
            _POSITION_TIES[self.position_tie] if len(positions) else 0,
            int(len(widths) > 0),
            int(self.logarithmic),
            kernels.LEAST_SQUARES if least_squares else kernels.LIKELIHOOD,
        ]
        return np.concatenate([np.array(codes, np.int64), flags])

    def numbers(self) -> Floats:
        """Return the multiples, 1, 2, 3 ... where none were given."""
        return self.multiples if len(self.multiples) == self.peaks else np.arange(1.0, self.peaks + 1)

    def template_counts(self) -> Floats:
        """Return the template, ones where there is none."""
        return self.template if len(self.template) == len(self.low) else np.ones(len(self.low))

    def free(self) -> Integers:
        """Return the indices of the free parameters."""
        position, width = ~self.fixed_position, ~self.fixed_width
        tied, alike = self.tied_positions(), self.tied_widths()
        if len(tied):
            held = bool(self.fixed_position[tied].any())
            position[tied] = False
            position[tied[0]] = not held
            position[tied[1]] |= self.position_tie == "ladder"
        if len(alike):
            held = bool(self.fixed_width[alike].any())
            width[alike] = False
            width[alike[0]] = not held
        chosen = np.zeros(self.size, bool)
        chosen[0:-2:4] = True
        chosen[1:-2:4], chosen[2:-2:4] = position, width
        chosen[3:-2:4] = self.shape in _EXTRA_LIMITS
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
            lower[-1], upper[-1] = -_STEEPEST, _STEEPEST
        self._tied_bounds(lower, upper)
        return lower, upper

    def _tied_bounds(self, lower: Floats, upper: Floats) -> None:
        """Set the bounds of parameters that a tie uses for something else."""
        tied, alike = self.tied_positions(), self.tied_widths()
        if len(tied):
            first, last = self.range_u
            number, at = self.numbers()[tied], 4 * int(tied[0]) + 1
            if self.logarithmic:
                lower[at], upper[at] = first - np.log10(number.max()), last - np.log10(number.min()) + 1.0
                ends = self.position_low[tied] - np.log10(number), self.position_high[tied] - np.log10(number)
            else:
                lower[at], upper[at] = max(first, 0.0) / number.max(), 2.0 * last / number.min()
                ends = self.position_low[tied] / number, self.position_high[tied] / number
            # A bound of one peak bounds the conductance; behind a resistance only from below.
            if float(ends[0].max()) < float(ends[1].min()):
                lower[at] = max(lower[at], float(ends[0].max()))
                if self.position_tie == "multiples":
                    upper[at] = min(upper[at], float(ends[1].min()))
            if self.position_tie == "ladder":
                top, at = 10.0**last if self.logarithmic else last, 4 * int(tied[1]) + 1
                lower[at], upper[at] = -0.5 / top, 0.95 / top
        if len(alike) and not self.logarithmic:
            lower[4 * alike[0] + 2], upper[4 * alike[0] + 2] = 1e-4, 2.0

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
        """Put the shared numbers where the kernels look for them: a fixed peak's own, else the median."""
        tied, alike = self.tied_positions(), self.tied_widths()
        if len(tied):
            number, place = self.numbers()[tied], self.position_u[tied]
            each = place - np.log10(number) if self.logarithmic else place / number
            fixed = self.fixed_position[tied]
            inner[4 * tied[0] + 1] = each[fixed][0] if fixed.any() else np.median(each)
            if self.position_tie == "ladder":
                inner[4 * tied[1] + 1] = 0.0
        if len(alike):
            width = self.width_u[alike] if self.logarithmic else self.width_u[alike] / self.position_u[alike]
            fixed = self.fixed_width[alike]
            inner[4 * alike[0] + 2] = width[fixed][0] if fixed.any() else np.median(width)

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
        total, slopes, full, _ = line_kernels.expected_counts(
            layout, self.numbers(), self.low, self.high, self.template_counts(), np.ascontiguousarray(inner, float)
        )
        components = np.array([full[4 * peak] * slopes[:, 4 * peak] for peak in range(self.peaks)])
        components = components.reshape(self.peaks, len(self.low))
        return Curves(total, total - components.sum(axis=0), components)

    def unpacked(self, inner: Floats) -> Floats:
        """Return area, position, width and extra of every peak, shape (peaks, 4), for parameters of the fit."""
        _, _, full, _ = line_kernels.expected_counts(
            self.layout(), self.numbers(), self.low[:1], self.high[:1], np.ones(1), np.ascontiguousarray(inner, float)
        )
        return full[:-2].reshape(self.peaks, 4)

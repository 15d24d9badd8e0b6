"""Length histograms, with censored lengths where they belong: beside a Kaplan-Meier curve."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from meseta.recipe.histogram import LengthSettings
from meseta.segmentation.results import PlateauTable, TraceMeasures

__all__ = [
    "LengthHistogram",
    "Spacing",
    "Survival",
    "kaplan_meier",
    "length_histogram",
    "plateau_lengths",
    "slope_histogram",
    "spacing_of",
]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]

_NORMAL = 1.959963984540054
_DRAWS = 400


@dataclass(frozen=True)
class Survival:
    """Kaplan-Meier estimate of the share of plateaus that are longer than a length.

    Attributes
    ----------
    length : (k,) float64
        Lengths at which a plateau ended, ascending.
    survival, low, high : (k,) float64
        Share longer than each, and its pointwise 95 % interval.
    median : float
        Smallest length that at most half outlast; NaN where more than half are censored beyond.
    """

    length: Floats
    survival: Floats
    low: Floats
    high: Floats
    median: float


def kaplan_meier(length: Floats, censored: Truths) -> Survival:
    """Return the Kaplan-Meier curve of lengths, some of which were cut short by the end of the record.

    Notes
    -----
    Kaplan and Meier, J. Am. Stat. Assoc. 53, 457 (1958); Greenwood's variance with the log-minus-log interval of
    Kalbfleisch and Prentice.  A censored length equal to a complete one counts as longer.
    """
    order = np.sort(length)
    ends, deaths = np.unique(length[~censored], return_counts=True)
    at_risk = len(order) - np.searchsorted(order, ends, side="left")
    with np.errstate(divide="ignore", invalid="ignore"):
        survival = np.cumprod(1 - deaths / at_risk).astype(np.float64)
        variance = np.cumsum(deaths / (at_risk * (at_risk - deaths).astype(float)))
        spread = _NORMAL * np.sqrt(variance) / np.abs(np.log(survival))
        low, high = survival ** np.exp(spread), survival ** np.exp(-spread)
    ended = survival <= 0
    low[ended], high[ended] = np.nan, np.nan
    below = np.flatnonzero(survival <= 0.5)
    return Survival(ends, survival, low, high, float(ends[below[0]]) if len(below) else np.nan)


@dataclass(frozen=True)
class LengthHistogram:
    """A histogram of lengths.

    Attributes
    ----------
    kind : str
        Which length: "plateaus in the window", "level crossing" ...
    edges : (bins + 1,) float64
        In ``unit``.
    counts : (bins,) int64
        Complete lengths in each bin.
    censored_counts : (bins,) int64
        Lengths that the end of the record, the floor or saturation cut short, at the length seen.
    over : int
        Lengths beyond the last edge.
    none : int
        Traces without such a length; counted, not binned.
    traces : int
        Traces that take part.
    density : (bins,) float64
        counts / (traces x width): per trace per unit.
    survival : Survival
    """

    kind: str
    edges: Floats
    unit: str
    counts: Integers
    censored_counts: Integers
    over: int
    none: int
    traces: int
    density: Floats
    density_unit: str
    survival: Survival


def length_histogram(
    kind: str, length: Floats, censored: Truths, traces: int, none: int, unit: str, settings: LengthSettings
) -> LengthHistogram:
    """Bin lengths; half-open bins from 0 to the longest that the recipe shows.

    Parameters
    ----------
    kind : str
    length : (n,) float64
        In ``unit``; NaN where there is none (left out).
    censored : (n,) bool
    traces, none : int
        Traces that take part, and those of them without a length.
    unit : str
        Unit of the drive.  Where that is not nm the axis ends at the longest length seen, in 100 bins.
    settings : LengthSettings
    """
    finite = np.isfinite(length)
    length, censored = length[finite], censored[finite]
    edges = _edges(length, unit, settings)
    counts, cut = (_binned(length[chosen], edges) for chosen in (~censored, censored))
    width = np.diff(edges)
    return LengthHistogram(
        kind=kind,
        edges=edges,
        unit=unit,
        counts=counts,
        censored_counts=cut,
        over=int((length >= edges[-1]).sum()),
        none=none,
        traces=traces,
        density=counts / (max(traces, 1) * width),
        density_unit=f"1 / trace / {unit}",
        survival=kaplan_meier(length, censored),
    )


def _edges(length: Floats, unit: str, settings: LengthSettings) -> Floats:
    if unit == "nm":
        bins = max(1, round(settings.high_nm / settings.bin_width_nm))
        return np.arange(bins + 1, dtype=np.float64) * settings.bin_width_nm
    longest = float(length.max(initial=0.0))
    edges: Floats = np.linspace(0.0, np.nextafter(longest, np.inf) if longest > 0 else 1.0, 101)
    return edges


def _binned(length: Floats, edges: Floats) -> Integers:
    at = np.searchsorted(edges, length, side="right") - 1
    inside = (at >= 0) & (at < len(edges) - 1)
    return np.bincount(at[inside], minlength=len(edges) - 1).astype(np.int64)


def plateau_lengths(
    plateaus: PlateauTable,
    measures: TraceMeasures,
    kept: Truths,
    unit: str,
    settings: LengthSettings,
) -> tuple[LengthHistogram, ...]:
    """Return the length histograms of a recording.

    Returns
    -------
    tuple of LengthHistogram
        "plateaus in the window" (segments whose conductance lies in ``low_g0`` to ``high_g0``), "level crossing" (from
        the last crossing of the upper to that of the lower bound) and "to rupture" (from the start of the trace to the
        zero of displacement; traces that did not break are censored at their span).
    """
    chosen = plateaus.take(
        kept[plateaus.trace] & (plateaus.level_g0 >= settings.low_g0) & (plateaus.level_g0 < settings.high_g0)
    )
    traces = int(kept.sum())
    with_plateau = len(np.unique(chosen.trace))
    segments = length_histogram(
        f"plateaus from {settings.low_g0:g} to {settings.high_g0:g} G0",
        chosen.length_drive,
        chosen.censored != "",
        traces,
        traces - with_plateau,
        unit,
        settings,
    )
    crossing, never = measures.crossing_length[kept], np.zeros(traces, bool)
    missing = int((~np.isfinite(crossing)).sum())
    crossings = length_histogram("level crossing", crossing, never, traces, missing, unit, settings)
    broken = measures.rupture_found[kept]
    stretch = np.where(broken, np.abs(measures.rupture_drive[kept]), measures.drive_span[kept])
    rupture = length_histogram("to rupture", stretch, ~broken, traces, 0, unit, settings)
    return segments, crossings, rupture


@dataclass(frozen=True)
class Spacing:
    """Evenly spaced peaks of a length histogram.

    Attributes
    ----------
    peaks : (k,) float64
        Places of the peaks found, ascending.
    spacing, error : float
        Least-squares spacing of the peaks and its standard error from their scatter about even places; NaN below two
        (three) peaks.
    low, high : float
        95 % interval of the spacing from drawing the counts anew (independent lengths); NaN below two peaks.
    text : str
        One sentence.
    """

    peaks: Floats
    spacing: float
    error: float
    low: float = np.nan
    high: float = np.nan
    text: str = ""


def spacing_of(histogram: LengthHistogram, smooth_bins: float = 2.0) -> Spacing:
    """Find the peaks of a length histogram and how far apart they are.

    A peak counts where it stands out of the smoothed histogram by more than three times its counting error.  Places
    that are about two or more spacings apart count as such: a missing peak does not double the spacing.

    Notes
    -----
    Evenly spaced maxima of plateau lengths are chains that break one atom longer each time: Yanson et al., Nature 395,
    783 (1998); Untiedt et al., arXiv cond-mat/0202349.  Lengths that the record cut short take no part.
    """
    from scipy import ndimage, signal

    counts = histogram.counts.astype(np.float64)
    smooth = ndimage.gaussian_filter1d(counts, smooth_bins, mode="nearest")
    error = np.sqrt(np.maximum(smooth, 1.0) / (2 * np.sqrt(np.pi) * smooth_bins))
    places, found = signal.find_peaks(smooth, prominence=0)
    chosen = places[found["prominences"] > 3 * error[places]]
    middle = (histogram.edges[1:] + histogram.edges[:-1]) / 2
    peaks = np.array([_vertex(smooth, middle, place) for place in chosen])
    if len(peaks) < 2:
        text = (
            "no two peaks stand out" if len(peaks) == 0 else f"one peak stands out, at {peaks[0]:.3g} {histogram.unit}"
        )
        return Spacing(peaks, np.nan, np.nan, text=text)
    order = np.concatenate([[0.0], np.cumsum(np.maximum(np.rint(np.diff(peaks) / np.diff(peaks).min()), 1))])
    order -= order.mean()
    norm = float(order @ order)
    slope = float(order @ peaks) / norm
    rest = peaks - peaks.mean() - slope * order
    error_of = float(np.sqrt(rest @ rest / (len(peaks) - 2) / norm)) if len(peaks) > 2 else np.nan
    drawn = np.random.default_rng(len(counts)).poisson(counts, (_DRAWS, len(counts))).astype(np.float64)
    again = ndimage.gaussian_filter1d(drawn, smooth_bins, axis=1, mode="nearest")
    reach = max(1, int(min(3 * smooth_bins, np.diff(chosen).min() // 2)))
    moved = np.array([[_vertex(one, middle, _top(one, place, reach)) for place in chosen] for one in again])
    low, high = np.quantile(moved @ order / norm, [0.025, 0.975])
    places_text = ", ".join(f"{peak:.3g}" for peak in peaks)
    text = f"peaks at {places_text} {histogram.unit}, {slope:.3g} {histogram.unit} apart ({low:.3g} to {high:.3g})"
    return Spacing(peaks, slope, error_of, float(low), float(high), text)


def _top(values: Floats, place: int, reach: int) -> int:
    """Return the highest place within ``reach`` bins of a place."""
    first = max(place - reach, 0)
    return first + int(values[first : place + reach + 1].argmax())


def slope_histogram(slopes: Floats, kept: Truths, unit: str) -> LengthHistogram:
    """Return the histogram of the tunnelling slopes of the kept traces, as steepness (positive).

    Parameters
    ----------
    slopes : (traces,) float64
        Decades per drive unit, negative for a decay; NaN where a trace has none (counted as ``none``).
    kept : (traces,) bool
    unit : str
        Of the drive.

    Returns
    -------
    LengthHistogram
        In decades per drive unit; 60 bins to twice the median.  The survival curve is the share of traces that are
        steeper.
    """
    steep = -slopes[kept]
    known = np.isfinite(steep) & (steep > 0)
    middle = float(np.median(steep[known])) if known.any() else 1.0
    settings = LengthSettings(bin_width_nm=middle / 30, high_nm=2 * middle)
    found = length_histogram(
        "tunnelling slope",
        np.where(known, steep, np.nan),
        np.zeros(len(steep), bool),
        len(steep),
        int((~known).sum()),
        "nm",
        settings,
    )
    return replace(found, unit=f"decades / {unit}", density_unit=f"1 / trace / (decades / {unit})")


def _vertex(values: Floats, middle: Floats, place: int) -> float:
    """Return the place of a maximum between bins, by a parabola through three of them."""
    if not 0 < place < len(values) - 1:
        return float(middle[place])
    before, at, after = values[place - 1 : place + 2]
    bend = before - 2 * at + after
    shift = 0.0 if bend == 0 else 0.5 * (before - after) / bend
    return float(middle[place] + shift * (middle[1] - middle[0]))

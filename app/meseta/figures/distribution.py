"""The panel of the 1D conductance histogram: lying on its side, with band, fit, single peaks and labels."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.text import Text
from matplotlib.ticker import FixedFormatter, FixedLocator, NullFormatter

from meseta import colours, typeset
from meseta.figures.labels import PeakLabels
from meseta.figures.scale import ConductanceScale, plain_ticks
from meseta.figures.words import per, say
from meseta.histograms import ConductanceHistogram
from meseta.peaks import PeakFit
from meseta.recipe.figure import FigureSettings

__all__ = ["draw_distribution"]

Floats = npt.NDArray[np.float64]
_CUT_FROM: Final = 4.0
"""The axis is cut where the histogram rises to more than this many times its height in the range of the fit."""
_TOGETHER: Final = 0.06
"""Cut places closer than this share of the conductance axis are told together."""
_BAND: Final = "#a9cdcf"
_BACKGROUND: Final = colours.LIGHT.quiet


def draw_distribution(
    axes: Axes,
    histogram: ConductanceHistogram,
    fit: PeakFit,
    scale: ConductanceScale,
    settings: FigureSettings,
    labelled: bool,
) -> None:
    """Draw the histogram with conductance upwards and density to the right.

    Parameters
    ----------
    axes : Axes
    histogram, fit
        As in :func:`~meseta.figures.result_figure`.
    scale : ConductanceScale
    settings : FigureSettings
    labelled : bool
        Whether the conductance axis has its own tick text; False where it is shared with the panel on the left.
    """
    scale.decorate(axes.yaxis, labelled)
    if labelled:
        axes.set_ylabel(scale.label)
    smoothed = f", smoothed over {settings.smoothing_bins:g} bins" if settings.smoothing_bins else ""
    label = axes.set_xlabel(_quantity(histogram.density_unit) + smoothed)
    if label.get_window_extent().width > 0.98 * axes.get_window_extent().width:
        label.set_text(per(histogram.density_unit) + smoothed)
    if not np.any(histogram.counts):
        plain_ticks(axes.xaxis, 0, 1, labelled=False)
        say(axes, _nothing(histogram))
        return
    if settings.guides:
        height = axes.get_window_extent().height
        scale.guides(axes, True, 4 * axes.figure.dpi / 72 / height * (scale.high - scale.low))
    _curve(axes, _smoothed(histogram, settings.smoothing_bins))
    _fit(axes, fit, scale, settings.components)
    logarithmic = settings.count_axis == "logarithmic"
    lowest, highest = _ends(histogram, fit, logarithmic)
    _limits(axes, lowest, highest, logarithmic)
    labels = PeakLabels.on(axes, fit.table, [float(place) for place in scale.u(fit.table.position_g0)])
    _make_room(axes, histogram, labels, lowest, highest, logarithmic)
    cut = _cut_notes(axes, histogram)
    labels.part([text for text, _ in cut])
    labels.leaders(axes, _heights(fit, scale, labels))
    if not np.any(np.isfinite(fit.table.position_g0)):
        why = next((str(text) for text in fit.table.status if str(text) != "ok"), "")
        words = f"no peak was fitted{':' if why else ''}\n{why}".strip()
        axes.text(0.98, 0.02, words, transform=axes.transAxes, ha="right", color=colours.LIGHT.doubtful)


def _quantity(unit: str) -> str:
    """Return what the density is, in words with its unit."""
    if unit.startswith("nm"):
        return f"Length ({per(unit)})"
    return per(unit)[:1].upper() + per(unit)[1:]


def _smoothed(histogram: ConductanceHistogram, bins: float) -> ConductanceHistogram:
    """Return the histogram as drawn with a running Gaussian mean; for the eye only."""
    if not bins:
        return histogram
    from scipy.ndimage import gaussian_filter1d

    density, low, high = (
        gaussian_filter1d(values, bins, mode="nearest")
        for values in (histogram.density, histogram.density_low, histogram.density_high)
    )
    return replace(histogram, density=density, density_low=low, density_high=high)


def _nothing(histogram: ConductanceHistogram) -> str:
    if not histogram.traces:
        return "no trace takes part"
    return f"no sample of {typeset.integer(histogram.traces)} traces\nlies in this range"


def _steps(edges: Floats, values: Floats) -> tuple[Floats, Floats]:
    """Return the corner points of a staircase."""
    return np.repeat(edges, 2)[1:-1], np.repeat(values, 2)


def _curve(axes: Axes, histogram: ConductanceHistogram) -> None:
    edges = histogram.grid.u_edges
    places, low = _steps(edges, histogram.density_low)
    _, high = _steps(edges, histogram.density_high)
    if np.any(np.isfinite(low)):
        axes.fill_betweenx(places, low, high, color=_BAND, linewidth=0, zorder=1, label="95 % band")
    count = f"{typeset.integer(histogram.traces)} traces"
    weak = (histogram.traces_in_bin < histogram.weak_traces) & (histogram.counts > 0)
    _staircase(axes, edges, np.where(weak, np.nan, histogram.density), colours.LIGHT.selected, "-", count)
    if np.any(weak):
        label = f"< {histogram.weak_traces} traces"
        _staircase(axes, edges, np.where(weak, histogram.density, np.nan), colours.LIGHT.every, "-", label)


def _staircase(axes: Axes, edges: Floats, density: Floats, colour: str, style: str, label: str) -> None:
    places, values = _steps(edges, density)
    axes.plot(values, places, style, color=colour, linewidth=0.7, zorder=2, label=label, solid_joinstyle="miter")


def _fit(axes: Axes, fit: PeakFit, scale: ConductanceScale, components: bool) -> None:
    if not np.any(np.isfinite(fit.model)):
        return
    places = scale.u(fit.grid.centres_g0)
    if components:
        for part in fit.components:
            axes.plot(part, places, color=colours.LIGHT.fit, linewidth=0.6, linestyle=(0, (1, 1.4)), zorder=3)
        axes.plot(fit.background, places, color=_BACKGROUND, linewidth=0.6, linestyle=(0, (1, 1.4)), zorder=3)
    axes.plot(
        fit.model, places, color=colours.LIGHT.fit, linewidth=1.0, linestyle=(0, (4, 1.8)), zorder=3.5, label="fit"
    )


def _ends(histogram: ConductanceHistogram, fit: PeakFit, logarithmic: bool) -> tuple[float, float]:
    """Return the ends of the density axis: cut where something dwarfs the fitted peaks."""
    known = histogram.density[np.isfinite(histogram.density)]
    whole = float(known.max())
    if logarithmic:
        return float(known[known > 0].min()) / 2, whole * 1.5
    lowest = min(0.0, float(known.min()))
    if not np.any(np.isfinite(fit.table.position_g0)) or not np.any(np.isfinite(fit.observed)):
        return lowest, whole
    fitted = float(np.nanmax(fit.observed))
    return lowest, fitted * 1.6 if whole > _CUT_FROM * fitted > 0 else max(whole, fitted)


def _limits(axes: Axes, low: float, high: float, logarithmic: bool) -> None:
    if logarithmic:
        axes.set_xscale("log")
        axes.set_xlim(low, high)
        powers = np.arange(int(np.ceil(np.log10(low))), int(np.floor(np.log10(high))) + 1)
        every = 1 + len(powers) // 6
        axes.xaxis.set_major_locator(FixedLocator((10.0**powers).tolist()))
        texts = [typeset.power_of_ten(int(power)) if power % every == 0 else "" for power in powers]
        axes.xaxis.set_major_formatter(FixedFormatter(texts))
        axes.xaxis.set_minor_formatter(NullFormatter())
        return
    axes.set_xlim(low, high * 1.04)
    plain_ticks(axes.xaxis, low, high * 1.04, most=5)


def _make_room(
    axes: Axes, histogram: ConductanceHistogram, labels: PeakLabels, low: float, high: float, logarithmic: bool
) -> None:
    """Widen the density axis until no label lies on the curve beside it."""
    if not labels.texts:
        return
    if logarithmic:
        _limits(
            axes,
            low,
            high * (high / low) ** (1 / max(min(map(labels.left_edge, range(len(labels.texts)))), 0.3) - 1),
            True,
        )
        return
    edges, wanted = histogram.grid.u_edges, high * 1.04
    for number in range(len(labels.texts)):
        bottom, top = labels.span(number)
        beside = (edges[1:] > bottom) & (edges[:-1] < top)
        tall = [values[beside & np.isfinite(values)] for values in (histogram.density, histogram.density_high)]
        highest = min(max((float(values.max()) for values in tall if values.size), default=0.0), high)
        share = max(labels.left_edge(number), 0.3)
        wanted = max(wanted, low + (highest - low) / share)
    axes.set_xlim(low, wanted)
    plain_ticks(axes.xaxis, low, wanted, most=5)


def _heights(fit: PeakFit, scale: ConductanceScale, labels: PeakLabels) -> list[float]:
    places = scale.u(fit.grid.centres_g0)
    return [float(np.interp(place, places, fit.model)) for place in labels.peak_u]


def _cut_notes(axes: Axes, histogram: ConductanceHistogram) -> list[tuple[Text, float]]:
    """Where the curve leaves the axis on the right, mark the place and write how far it goes.

    Places closer than a line of text are told together.  Returns the notes and their wanted places in u.
    """
    beyond = np.flatnonzero(histogram.density > axes.get_xlim()[1])
    if not beyond.size:
        return []
    u = (histogram.grid.u_edges[1:] + histogram.grid.u_edges[:-1]) / 2
    close = _TOGETHER * abs(np.subtract(*axes.get_ylim()))
    notes = []
    for run in np.split(beyond, np.flatnonzero(np.diff(u[beyond]) > close) + 1):
        top = run[np.argmax(histogram.density[run])]
        mark = axes.plot([1.0], [u[top]], ">", transform=axes.get_yaxis_transform(), zorder=6)[0]
        mark.set(markersize=2.6, color=colours.LIGHT.selected, clip_on=False)
        words = f"to {typeset.number(float(histogram.density[top]), 2)}"
        notes.append((_note(axes, words, float(u[top])), float(u[top])))
    return notes


def _note(axes: Axes, words: str, place: float) -> Text:
    text = axes.text(0.98, place, words, transform=axes.get_yaxis_transform(), ha="right", va="center", zorder=5)
    text.set_color(colours.LIGHT.selected)
    text.set_bbox({"boxstyle": "square,pad=0.1", "facecolor": colours.LIGHT.panel, "edgecolor": "none"})
    return text

"""Where the labels of peaks stand: beside their peaks, never on one another."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.text import Text

from meseta import colours, typeset
from meseta.peaks import PeakTable

__all__ = ["PeakLabels", "peak_text", "spread"]

_GAP_POINT: Final = 2.0
_SLANT: Final = 0.03
"""Least share of the width in which a hairline slants: in less there is no room for one."""


def peak_text(table: PeakTable, row: int) -> str:
    """Return the label of a peak: its name where it has one, and its position with the 95 % half width in brackets."""
    position = typeset.value_with_uncertainty(
        float(table.position_g0[row]), float(table.position_low_g0[row]), float(table.position_high_g0[row]), "G0"
    )
    name = str(table.peak[row])
    return position if not name or name.isdigit() else f"{name}\n{position}"


def spread(wanted: Sequence[float], sizes: Sequence[float], low: float, high: float) -> list[float]:
    """Return places as near as possible to the wanted ones at which intervals of these sizes do not overlap.

    The sum of squared shifts is least: neighbours that would overlap become one block about its mean wanted place
    (isotonic regression by pooling).  Where all sizes together exceed ``high - low`` they touch and leave the range.

    Parameters
    ----------
    wanted : sequence of float
        Centres asked for, ascending.
    sizes : sequence of float
        Lengths of the intervals.
    low, high : float
        Range in which they should stay.
    """
    if not len(wanted):
        return []
    before = np.concatenate([[0], np.cumsum(sizes)[:-1]]) + np.asarray(sizes) / 2
    blocks: list[list[float]] = []
    for target in np.asarray(wanted, float) - before:
        blocks.append([target, 1.0])
        while len(blocks) > 1 and blocks[-2][0] > blocks[-1][0]:
            value, weight = blocks.pop()
            mean = (blocks[-1][0] * blocks[-1][1] + value * weight) / (blocks[-1][1] + weight)
            blocks[-1] = [mean, blocks[-1][1] + weight]
    start = np.repeat([value for value, _ in blocks], [int(weight) for _, weight in blocks])
    start = np.clip(start, low, max(low, high - float(np.sum(sizes))))
    return [float(place) for place in start + before]


@dataclass(frozen=True)
class PeakLabels:
    """Labels in a column at the right edge of a sideways histogram.

    Attributes
    ----------
    texts : list of Text
        One a peak, ascending in conductance, at their places in y; the right edge is the edge of the axes.
    peak_u : list of float
        Place of each peak on the conductance axis.
    """

    texts: list[Text]
    peak_u: list[float]

    @classmethod
    def on(cls, axes: Axes, table: PeakTable, peak_u: Sequence[float]) -> PeakLabels:
        """Write the labels; the y limits of the axes must be final."""
        texts: list[Text] = []
        shown: list[float] = []
        for row in np.argsort(np.asarray(peak_u, float), kind="stable"):
            place = float(peak_u[row])
            if np.isfinite(place) and axes.get_ylim()[0] <= place <= axes.get_ylim()[1]:
                sound = str(table.status[row]) == "ok"
                text = axes.text(
                    1.0,
                    place,
                    peak_text(table, int(row)) + ("" if sound else f"\n{_short(str(table.status[row]))}"),
                    transform=axes.get_yaxis_transform(),
                    ha="right",
                    va="center",
                    linespacing=1.05,
                    color=colours.LIGHT.fit if sound else colours.LIGHT.doubtful,
                    bbox={"boxstyle": "square,pad=0.1", "facecolor": colours.LIGHT.panel, "edgecolor": "none"},
                    zorder=5,
                )
                text.set_gid(f"peak-label-{len(texts)}")
                texts.append(text)
                shown.append(place)
        labels = cls(texts, shown)
        labels.part()
        return labels

    def part(self, others: Sequence[Text] = ()) -> None:
        """Move the labels, and other texts of the same column, in y until none lies on another."""
        wanted = [
            *zip(self.peak_u, self.texts, strict=True),
            *((float(text.get_position()[1]), text) for text in others),
        ]
        if not wanted:
            return
        wanted.sort(key=lambda pair: pair[0])
        axes = wanted[0][1].axes
        assert axes is not None
        gap = _GAP_POINT * axes.figure.dpi / 72
        low, high = axes.transAxes.transform([(0, 0), (0, 1)])[:, 1]
        middle = axes.transData.transform([(0, place) for place, _ in wanted])[:, 1]
        sizes = [text.get_window_extent().height + gap for _, text in wanted]
        for (_, text), place in zip(wanted, spread(list(middle), sizes, float(low), float(high)), strict=True):
            text.set_y(float(axes.transData.inverted().transform((0, place))[1]))

    def left_edge(self, number: int) -> float:
        """Return where a label begins, as a share of the axes' width."""
        text = self.texts[number]
        axes = text.axes
        assert axes is not None
        gap = 2 * _GAP_POINT * axes.figure.dpi / 72
        box = text.get_window_extent()
        return float(axes.transAxes.inverted().transform((box.x0 - gap, box.y0))[0])

    def span(self, number: int) -> tuple[float, float]:
        """Return the range of the conductance axis that a label covers."""
        text = self.texts[number]
        axes = text.axes
        assert axes is not None
        box = text.get_window_extent()
        ends = axes.transData.inverted().transform([(box.x0, box.y0), (box.x0, box.y1)])[:, 1]
        return float(ends[0]), float(ends[1])

    def leaders(self, axes: Axes, heights: Sequence[float]) -> None:
        """Draw a hairline from each peak (at the given heights of the histogram) to its label; no two cross.

        Each runs level to where the tallest peak that has one ends, slants to where the first label begins, and runs
        level again: peaks and labels stand in the same order, so the slanted parts cannot cross.
        """
        to_share = (axes.transData + axes.transAxes.inverted()).transform
        starts = [float(to_share((height, place))[0]) for place, height in zip(self.peak_u, heights, strict=True)]
        edges = [self.left_edge(number) for number in range(len(self.texts))]
        end = min((edge for edge, start in zip(edges, starts, strict=True) if edge > start), default=0.0)
        led = [number for number in range(len(self.texts)) if starts[number] < end - _SLANT]
        bend = max((starts[number] for number in led), default=0.0)
        for number in led:
            text, place = self.texts[number], self.peak_u[number]
            there = float(text.get_position()[1])
            axes.plot(
                [starts[number], bend, end, edges[number]],
                [place, place, there, there],
                color=text.get_color(),
                linewidth=0.4,
                zorder=4,
                gid=f"peak-leader-{number}",
                transform=axes.get_yaxis_transform(),
                scalex=False,
                scaley=False,
            )


def _short(text: str, most: int = 34) -> str:
    first = text.split(";")[0].strip()
    return first if len(first) <= most else first[: most - 1].rstrip() + "…"

"""Axes whose ticks are set as in print: powers of ten with real superscripts, plain numbers with thin spaces."""

from __future__ import annotations

from typing import Any

import numpy as np
import pyqtgraph as pg
from PySide6.QtCore import Qt
from PySide6.QtGui import QFontMetricsF

from meseta import typeset
from meseta.window.theme import Theme

__all__ = ["Axis", "ConductanceAxis", "LogCountAxis", "PlainAxis", "fitting"]


class Axis(pg.AxisItem):
    """An axis without frame or grid, in the colours of the theme."""

    _text = ""
    labelText: str

    def __init__(self, orientation: str, text: str = "") -> None:
        super().__init__(orientation, maxTickLength=-4)
        self._text, self._named = text, True
        self.enableAutoSIPrefix(False)
        self.setStyle(autoExpandTextSpace=False, autoReduceTextSpace=False, hideOverlappingLabels=True)

    def say(self, text: str) -> None:
        """Write what the axis shows, with its unit."""
        if text != self._text or not self.labelText:
            self._text = text
            self._write_label()

    def show_name(self, shown: bool) -> None:
        """Show or hide what the axis shows."""
        self._named = shown
        self._write_label()

    def refit(self) -> None:
        """Ask for the room that ticks and title need, as far as they are shown."""
        self.showLabel(self._named and bool(self._text))

    def _write_label(self, **style: str) -> None:
        self.setLabel(self._text, **style)
        self.showLabel(self._named and bool(self._text))
        self.resizeEvent()  # pyqtgraph leaves a changed label where the old one was centred

    def resizeEvent(self, event: Any = None) -> None:
        """Shorten what a narrow horizontal axis shows: a unit alone, strokes for "per", or as much as there is room."""
        width = self.size().width()
        if self.label is not None and self.orientation == "bottom" and self._text and width > 0:
            shown = fitting(self._text, QFontMetricsF(self.label.font()), width - 8)
            if shown != self.labelText:
                self.labelText = shown
                self.label.setHtml(self.labelString())
        super().resizeEvent(event)

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        self.setPen(theme.pen("hairline"))
        self.setTextPen(theme.pen("quiet"))
        if self._text:
            self._write_label(color=theme.palette.quiet)

    # A wheel or drag on the axis belongs to the view's own gestures.
    def mouseDragEvent(self, event: Any) -> None:
        """Leave dragging to the plot."""
        event.ignore()


class ConductanceAxis(Axis):
    """The vertical axis of all plots: log10 G with a label a decade, or G."""

    def __init__(self, orientation: str = "left", *, labelled: bool = True) -> None:
        super().__init__(orientation, f"conductance G / {typeset.G0}" if labelled else "")
        self.logarithmic = True
        self._labelled = labelled

    def set_logarithmic(self, logarithmic: bool) -> None:
        """Choose between log10 G and G."""
        if logarithmic != self.logarithmic:
            self.logarithmic = logarithmic
            self.picture = None
            self.update()

    def tickValues(self, minVal: float, maxVal: float, size: float) -> list[tuple[float, list[float]]]:
        """Return the places of ticks, coarse ones first."""
        if not self.logarithmic or maxVal - minVal < 0.4:
            return _plain_ticks(minVal, maxVal, size, 28.0)
        low, high = int(np.floor(minVal)), int(np.ceil(maxVal))
        step = max(int(np.ceil((high - low) * 22.0 / max(size, 1.0))), 1)
        decades = [float(u) for u in range(low, high + 1) if u % step == 0]
        between = [u + float(np.log10(k)) for u in range(low, high + 1) for k in range(2, 10)]
        minor = between if (high - low) * 60 < size * 1.2 else []
        return [
            (1.0, [u for u in decades if minVal <= u <= maxVal]),
            (0.1, [u for u in minor if minVal <= u <= maxVal]),
        ]

    def tickStrings(self, values: list[float], scale: float, spacing: float) -> list[str]:
        """Return the text of ticks: a power of ten a decade, nothing between."""
        if not self.logarithmic:
            return _plain_texts(values, spacing)
        if spacing < 0.5 and self.range[1] - self.range[0] >= 0.4:
            return [""] * len(values)
        return [
            typeset.power_of_ten(round(value)) if abs(value - round(value)) < 1e-9 else typeset.number(10**value, 3)
            for value in values
        ]


class LogCountAxis(Axis):
    """A horizontal axis of log10 of a density, with a label a decade."""

    def __init__(self, orientation: str = "bottom", text: str = "") -> None:
        super().__init__(orientation, text)
        self.logarithmic = False

    def tickValues(self, minVal: float, maxVal: float, size: float) -> list[tuple[float, list[float]]]:
        """Return the places of ticks."""
        if not self.logarithmic:
            return _plain_ticks(minVal, maxVal, size, 56.0)
        step = max(int(np.ceil((maxVal - minVal) * 40.0 / max(size, 1.0))), 1)
        decades = [float(u) for u in range(int(np.ceil(minVal)), int(np.floor(maxVal)) + 1) if u % step == 0]
        return [(1.0, decades)]

    def tickStrings(self, values: list[float], scale: float, spacing: float) -> list[str]:
        """Return the text of ticks."""
        if self.logarithmic:
            return [typeset.power_of_ten(round(value)) for value in values]
        return _plain_texts(values, spacing)


class PlainAxis(Axis):
    """A linear axis; ``whole`` sets thousands apart and shows no fractions."""

    def __init__(self, orientation: str = "bottom", text: str = "", *, whole: bool = False) -> None:
        super().__init__(orientation, text)
        self._whole = whole

    def tickValues(self, minVal: float, maxVal: float, size: float) -> list[tuple[float, list[float]]]:
        """Return the places of ticks."""
        apart = 64.0 if self.orientation in ("bottom", "top") else 28.0
        return _plain_ticks(minVal, maxVal, size, apart, whole=self._whole)

    def tickStrings(self, values: list[float], scale: float, spacing: float) -> list[str]:
        """Return the text of ticks."""
        if self._whole:
            return [typeset.integer(round(value)) for value in values]
        return _plain_texts(values, spacing)


def fitting(text: str, metrics: QFontMetricsF, width: float) -> str:
    """Return the longest form of an axis title that fits a width in pixels."""
    unit = text.partition("(")[2].rstrip(")") if text.count("(") == 1 else ""
    for form in (text, text.replace(" per ", "/"), unit):
        if form and metrics.horizontalAdvance(form) <= width:
            return form
    return metrics.elidedText(text.replace(" per ", "/"), Qt.TextElideMode.ElideRight, width)


def _clean(value: float) -> float:
    return 0.0 if abs(value) < 1e-12 else value


def _plain_ticks(
    low: float, high: float, size: float, apart: float, *, whole: bool = False
) -> list[tuple[float, list[float]]]:
    """Return ticks at 1, 2 or 5 times a power of ten, at least ``apart`` pixels from one another."""
    span = high - low
    if not np.isfinite(span) or span <= 0 or size <= 0:
        return []
    rough = span * apart / size
    power = 10.0 ** np.floor(np.log10(rough))
    spacing = next(step * power for step in (1, 2, 5, 10) if step * power >= rough * (1 - 1e-9))
    if whole:
        spacing = max(spacing, 1.0)
    first, last = int(np.ceil(low / spacing - 1e-9)), int(np.floor(high / spacing + 1e-9))
    return [(float(spacing), [float(k * spacing) for k in range(first, last + 1)])]


def _plain_texts(values: list[float], spacing: float) -> list[str]:
    """Return numbers with as many decimals as their spacing asks for, or with a common form for very small ones."""
    if spacing <= 0:
        return [typeset.number(value) for value in values]
    decimals = max(-int(np.floor(np.log10(spacing) + 1e-9)), 0)
    if decimals > 4 or spacing >= 1e6:
        return [typeset.number(_clean(value), 2) for value in values]
    texts = []
    for value in values:
        text = f"{abs(value):.{decimals}f}"
        negative = value < 0 and float(text) != 0
        whole, point, rest = text.partition(".")
        texts.append((typeset.MINUS if negative else "") + typeset.integer(int(whole)) + point + rest)
    return texts

"""How alike later traces are: bin by bin against the shift, and over all bins with its decay; and what follows."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QRectF, Qt
from PySide6.QtWidgets import QLabel

from meseta import colours, typeset
from meseta.window.frame import Frame
from meseta.window.plots.panel import BOTTOM_PIXELS, PlotData, PlotPanel, show_below
from meseta.window.plots.ticks import ConductanceAxis, PlainAxis
from meseta.window.session import Hover
from meseta.window.theme import Theme

if TYPE_CHECKING:
    from meseta.histograms import ShiftedCorrelation

__all__ = ["RecordPanel"]

HEIGHT = 150
STEP = "shifted_correlation"


class RecordPanel(PlotPanel):
    """Shifted correlation, its decay, drift and effective number."""

    title = "Memory of the record"
    help_page = "temporal"
    object_name = "record"

    def __init__(self, frame: Frame) -> None:
        self.conductance = ConductanceAxis("left")
        super().__init__(frame, PlainAxis("bottom", "shift (traces)", whole=True), self.conductance)
        self.conductance.setWidth(64)
        self._span: tuple[float, float] = (0.5, 100.5)
        self._limit = 1.0
        self.bottom.setHeight(8)
        self.bottom.setStyle(showValues=False)
        self.bottom.show_name(False)
        self.image = pg.ImageItem()
        self.box.addItem(self.image, ignoreBounds=True)
        self._make_lower()
        self.statements = QLabel("")
        self.statements.setWordWrap(True)
        self.statements.setContentsMargins(12, 0, 12, 8)
        self.statements.setAccessibleName("What the record is worth, and whether it drifts")
        self.statements.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        column = self.layout()
        assert column is not None
        column.addWidget(self.statements)
        session = self.session
        names = (STEP, "drift", "resampling")
        session.result_changed.connect(lambda name: self._draw() if name in names else None)
        session.states_changed.connect(self._say)
        session.traces_changed.connect(self._draw)
        self.box.zoomed.connect(lambda x_factor, y_factor, x, _: self._zoom(x_factor * y_factor, x))
        self.box.moved.connect(lambda x, _: self._look(self._span[0] + x, self._span[1] + x))
        self.box.reset.connect(self._show_all)
        self.wear(frame.theme)
        self._draw()

    def _make_lower(self) -> None:
        self.likeness, self.shift = PlainAxis("left", "likeness"), PlainAxis("bottom", "shift (traces)", whole=True)
        self.likeness.setWidth(64)
        self.shift.setHeight(BOTTOM_PIXELS)
        self.item = pg.PlotItem(axisItems={"left": self.likeness, "bottom": self.shift}, enableMenu=False)
        self.item.hideButtons()
        box = self.item.getViewBox()
        box.setMouseEnabled(False, False)
        box.disableAutoRange()
        self.chance = pg.LinearRegionItem(orientation="horizontal", movable=False)
        self.mean, self.decay = pg.PlotCurveItem(antialias=False), pg.PlotCurveItem(antialias=False)
        for item in (self.chance, self.mean, self.decay):
            self.item.addItem(item, ignoreBounds=True)
        self.item.setFixedHeight(HEIGHT)
        self.plot.getPlotItem().layout.addItem(self.item, 6, 0, 1, 4)

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        for axis in (self.likeness, self.shift):
            axis.wear(theme)
        self.chance.setBrush(pg.mkBrush(theme.colour("every", 60)))
        for line in self.chance.lines:
            line.setPen(pg.mkPen(None))
        self.mean.setPen(theme.pen("selected"))
        self.decay.setPen(theme.wide_pen("fit", 1.0, dashed=True))
        self._draw()

    @property
    def found(self) -> ShiftedCorrelation | None:
        """The shifted correlation as last shown, where there is any."""
        found: ShiftedCorrelation | None = self.session.result(STEP)
        return found if found is not None and len(found.shift) else None

    # -- drawing -----------------------------------------------------------------------------------------------------

    def _draw(self) -> None:
        found = self.found
        self.image.setVisible(found is not None)
        show_below(self.item, found is not None)
        if found is not None:
            self._paint(found)
            self._draw_mean(found)
            self._show_all()
        self._say()

    def _paint(self, found: ShiftedCorrelation) -> None:
        values = np.nan_to_num(np.where(found.weak, 0.0, found.same_bin))
        self._limit = max(float(np.quantile(np.abs(values), 0.99)), 2 * found.chance, 1e-6)
        places = np.clip(np.round((values / self._limit + 1) * 128), 0, 256).astype(np.uint16)
        table = np.full((257, 4), 255, np.uint8)
        table[:, :3] = np.round(colours.diverging(self.frame.theme.dark, 257) * 255)
        self.image.setImage(table[places], autoLevels=False, levels=(0, 255))
        u = found.grid.u_edges
        self.image.setRect(QRectF(float(found.shift[0]) - 0.5, float(u[0]), len(found.shift), float(u[-1] - u[0])))
        self.conductance.set_logarithmic(found.grid.axis == "logarithmic")
        self.box.setYRange(float(u[0]), float(u[-1]), padding=0.01)

    def _draw_mean(self, found: ShiftedCorrelation) -> None:
        self.mean.setData(found.shift.astype(float), found.mean)
        self.chance.setRegion((-found.chance, found.chance))
        decay = found.decay
        self.decay.setVisible(decay.found)
        if decay.found:
            self.decay.setData(found.shift.astype(float), decay.amplitude * np.exp(-found.shift / decay.length_traces))
        low, high = float(np.nanmin(found.mean, initial=0.0)), float(np.nanmax(found.mean, initial=0.0))
        low, high = min(low, -1.5 * found.chance), max(high, 1.5 * found.chance)
        self.item.getViewBox().setYRange(low, high, padding=0.05)

    def _show_all(self) -> None:
        found = self.found
        if found is not None:
            self._look(float(found.shift[0]) - 0.5, float(found.shift[-1]) + 0.5)

    def _zoom(self, factor: float, x: float) -> None:
        first, last = self._span
        self._look(x - (x - first) * factor, x + (last - x) * factor)

    def _look(self, first: float, last: float) -> None:
        if last - first < 3:
            return
        self._span = (first, last)
        for box in (self.box, self.item.getViewBox()):
            box.setXRange(first, last, padding=0)

    # -- words -------------------------------------------------------------------------------------------------------

    def _say(self) -> None:
        session, state, found = self.session, self.session.state(STEP), self.found
        error, shown = session.errors.get(STEP), session.result(STEP)
        if session.traces is None:
            self.say_empty("Whether traces resemble those after them will stand here.")
        elif error is not None:
            self.say_empty(str(error))
        elif found is None:
            words = "Not yet worked out." if shown is None else shown.text
            self.say_empty("Comparing traces with later ones …" if state == "working" and shown is None else words)
        else:
            self.say_empty("")
        self.say_state("out of date" if state == "out of date" else "")
        self.say_note(
            ""
            if found is None
            else f"teal {typeset.MINUS}{typeset.number(self._limit, 2)} to orange +{typeset.number(self._limit, 2)}"
        )
        drift, resampling = session.result("drift"), session.result("resampling")
        parts = [] if found is None else [found.text]
        parts += [] if resampling is None else [resampling.statement(), f"held fixed: {resampling.held_fixed}"]
        parts += [] if drift is None else [drift.text]
        lines = [f"{part[:1].upper()}{part[1:]}." for part in parts if part and not part.endswith(": ")]
        self.statements.setText("\n".join(lines))

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return the conductance under the pointer, where the plots show the same axis."""
        found = self.found
        return Hover(y) if found is not None and found.grid.axis == self.session.axis else None

    def data(self) -> PlotData | None:
        """Return the correlation of every bin with itself later, one row a shift and bin."""
        found = self.found
        if found is None:
            return None
        shifts, bins = len(found.shift), found.grid.bins
        columns: dict[str, npt.NDArray[Any]] = {
            "shift_traces": np.repeat(found.shift, bins),
            "g_g0": np.tile(found.grid.centres_g0, shifts),
            "correlation": found.same_bin.ravel(),
            "mean_correlation": np.repeat(found.mean, bins),
        }
        return PlotData("shifted correlation", columns)

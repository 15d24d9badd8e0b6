"""The 2D histogram as an image on the two shared axes; what is selected is laid over all in grey."""

from __future__ import annotations

import numpy as np
import pyqtgraph as pg
from PySide6.QtCore import QRectF

from meseta import typeset
from meseta.histograms import DisplacementHistogram
from meseta.window.frame import Frame
from meseta.window.pictures import scaled_image, usual_top
from meseta.window.plots.drawing import WindowTool
from meseta.window.plots.panel import DrivePanel, PlotData
from meseta.window.plots.scale import ScaleBar
from meseta.window.plots.ticks import PlainAxis
from meseta.window.session import Change
from meseta.window.theme import Theme

__all__ = ["DisplacementPanel"]


class DisplacementPanel(DrivePanel):
    """The 2D histogram."""

    title = "2D histogram"
    help_page = "displacement_histogram"
    object_name = "histogram2d"
    guides_above = True

    def __init__(self, frame: Frame) -> None:
        super().__init__(frame, PlainAxis("bottom", "displacement (nm)"))
        self.image, self.over = pg.ImageItem(), pg.ImageItem()
        for z, item in ((-30, self.image), (-29, self.over)):
            item.setZValue(z)
            self.box.addItem(item, ignoreBounds=True)
        self.over.hide()
        self.scale = ScaleBar()
        self.corner.addWidget(self.scale)
        self.tool = WindowTool(self, across=True)
        self._whole: DisplacementHistogram | None = None
        self._part: DisplacementHistogram | None = None
        session = self.session
        session.result_changed.connect(self._result_changed)
        session.states_changed.connect(self._say)
        session.traces_changed.connect(self._traces_changed)
        session.document_changed.connect(self._document_changed)
        session.part_2d_changed.connect(self._part_changed)
        self.wear(frame.theme)
        self._traces_changed()

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.tool.wear(theme)
        self._draw()

    def _traces_changed(self) -> None:
        self._whole = self.session.result("displacement_histogram")
        self._part = None
        unit = self.session.drive_unit
        self.bottom.say("displacement (nm)" if unit == "nm" else f"drive ({unit})")
        self._draw()
        self._say()

    def _result_changed(self, name: str) -> None:
        if name == "displacement_histogram":
            self._whole = self.session.result(name)
            self._draw()

    def _part_changed(self, part: DisplacementHistogram | None) -> None:
        self._part = part
        self._draw()

    def _document_changed(self, change: Change) -> None:
        if change.before.recipe.figure != change.after.recipe.figure:
            self._draw()
        if change.recipe:
            self._say()

    # -- drawing -----------------------------------------------------------------------------------------------------

    def _draw(self) -> None:
        whole = self._whole
        fits = whole is not None and whole.grid.axis == self.session.axis
        self.image.setVisible(fits)
        if not fits or whole is None:
            self.over.hide()
            self.scale.hide()
            return
        theme, settings = self.frame.theme, self.session.document.recipe.figure
        part = self._part if self._part is not None and self._part.density.shape == whole.density.shape else None
        lookup = theme.lookup(settings.colour_map) if part is None else theme.grey_lookup
        lookup = lookup.copy()
        lookup[0, :3] = theme.lookup("grey")[0, :3]
        self._set(self.image, whole, lookup)
        if part is not None:
            self._set(self.over, part, theme.over_lookup)
        self.over.setVisible(part is not None)
        top = usual_top(whole.density)
        self.scale.show_scale(lookup, top, settings.colour_scale, whole.density_unit, theme)

    def _set(self, item: pg.ImageItem, histogram: DisplacementHistogram, lookup: np.ndarray) -> None:
        scale = self.session.document.recipe.figure.colour_scale
        image = scaled_image(histogram.density, scale, usual_top(histogram.density))
        item.setImage(image, autoLevels=False, levels=(0, 255), lut=lookup)
        x, u = histogram.drive_edges, histogram.grid.u_edges
        item.setRect(QRectF(float(x[0]), float(u[0]), float(x[-1] - x[0]), float(u[-1] - u[0])))

    def _say(self) -> None:
        session = self.session
        state = session.state("displacement_histogram")
        self.say_state({"out of date": "out of date", "working": "working …" if self._whole else ""}.get(state, ""))
        if session.traces is None:
            self.say_empty("All traces will lie over one another here, aligned at their rupture.")
        elif "displacement_histogram" in session.errors:
            self.say_empty(str(session.errors["displacement_histogram"]))
        elif self._whole is None or self._whole.grid.axis != session.axis:
            self.say_empty("Counting the samples …" if state == "working" else "")
        elif self._whole.traces == 0:
            self.say_empty("No trace crosses the zero of displacement. See the step Zero of displacement.")
        else:
            self.say_empty("")
        if self._whole is not None:
            self.heading.setToolTip(f"{typeset.integer(self._whole.traces)} traces")

    def data(self) -> PlotData | None:
        """Return the counts, one row a bin."""
        shown = self._part or self._whole
        if shown is None:
            return None
        columns, bins = shown.counts.shape
        x, g = shown.drive_edges, shown.grid.edges_g0
        unit = shown.drive_unit
        return PlotData(
            "2D histogram",
            {
                f"displacement_low_{unit}": np.repeat(x[:-1], bins),
                f"displacement_high_{unit}": np.repeat(x[1:], bins),
                "g_low_g0": np.tile(g[:-1], columns),
                "g_high_g0": np.tile(g[1:], columns),
                "counts": shown.counts.ravel(),
                "density": shown.density.ravel(),
            },
        )

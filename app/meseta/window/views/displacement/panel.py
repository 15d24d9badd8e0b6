"""The 2D histogram as an image on the two shared axes; what is selected is laid over all in grey."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import pyqtgraph as pg
from PySide6.QtCore import QRectF
from PySide6.QtGui import QResizeEvent

from meseta import typeset
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.plots.drawing import WindowTool
from meseta.window.plots.panel import HEADING_MARGINS, DrivePanel, PlotData
from meseta.window.plots.scale import ScaleBar
from meseta.window.plots.ticks import PlainAxis
from meseta.window.session import Change
from meseta.window.theme import Theme
from meseta.window.views.displacement.picture import DisplacementImage, DisplacementPicture, displacement_picture
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.histograms import DisplacementHistogram

__all__ = ["DisplacementPanel"]

IMAGE = Channel("displacement_image", quick=True, shown=False)


class DisplacementPanel(DrivePanel):
    """The 2D histogram."""

    title = "2D histogram"
    shorter = ("2D",)
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
        self._picture: DisplacementPicture | None = None
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

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Leave the scale out where there is room for the heading only."""
        super().resizeEvent(event)
        self.scale.give_room(self.width() - self.heading.minimumSizeHint().width() - HEADING_MARGINS)

    def _traces_changed(self) -> None:
        self._whole = self.session.result("displacement_histogram")
        self._part = None
        self._ask()
        self._name_axis()
        self._say()

    def _name_axis(self) -> None:
        """Say on the axis what displacement is counted from where that is not its zero."""
        unit, frame = self.session.drive_unit, self.session.document.recipe.displacement_histogram
        since = {"plateau_start": " from plateau start", "plateau_end": " from plateau end"}.get(frame.aligned_at, "")
        self.bottom.say(f"{'displacement' if unit == 'nm' else 'drive'}{since} ({unit})")

    def _result_changed(self, name: str) -> None:
        if name == "displacement_histogram":
            self._whole = self.session.result(name)
            self._ask()

    def _part_changed(self, part: DisplacementHistogram | None) -> None:
        self._part = part
        self._ask()

    def _document_changed(self, change: Change) -> None:
        before, after = change.before.recipe, change.after.recipe
        if before.figure.colour_scale != after.figure.colour_scale:
            self._ask()
        if before.figure != after.figure or before.histogram.axis != after.histogram.axis:
            self._draw()
        if change.recipe:
            self._name_axis()
            self._say()

    # -- drawing -----------------------------------------------------------------------------------------------------

    def _ask(self) -> None:
        """Have the images made off the window's thread; until they come the last ones stay."""
        whole, part, before = self._whole, self._part, self._picture
        if whole is None:
            self.session.jobs.cancel(IMAGE)
            self._take(None)
            return
        scale = self.session.document.recipe.figure.colour_scale

        def task(work: Work, _: Callable[[Any], None]) -> DisplacementPicture:
            return displacement_picture(whole, part, scale, before, work)

        self.session.jobs.submit(IMAGE, "2D histogram", task, self._take, self.session.problem.emit)

    def _take(self, picture: DisplacementPicture | None) -> None:
        self._picture = picture
        self._draw()
        self._say()

    def _draw(self) -> None:
        picture = self._picture
        fits = picture is not None and picture.whole.histogram.grid.axis == self.session.axis
        self.image.setVisible(fits)
        if not fits or picture is None:
            self.over.hide()
            self.scale.clear()
            return
        theme, settings = self.frame.theme, self.session.document.recipe.figure
        lookup = (theme.lookup(settings.colour_map) if picture.part is None else theme.grey_lookup).copy()
        lookup[0, :3] = theme.lookup("grey")[0, :3]
        self._set(self.image, picture.whole, lookup)
        if picture.part is not None:
            self._set(self.over, picture.part, theme.over_lookup)
        self.over.setVisible(picture.part is not None)
        unit = picture.whole.histogram.density_unit
        self.scale.show_scale(lookup, picture.whole.top, picture.scale, unit, theme)

    def _set(self, item: pg.ImageItem, image: DisplacementImage, lookup: np.ndarray) -> None:
        item.setImage(image.places, autoLevels=False, levels=(0, 255), lut=lookup)
        x, u = image.histogram.drive_edges, image.histogram.grid.u_edges
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

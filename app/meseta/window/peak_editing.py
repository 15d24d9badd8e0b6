"""Editing the peaks of the fit: which peak is chosen, and every change as one undoable step with a readable name.

The peaks asked for live in the recipe and nowhere else.  While the recipe asks for none, the fit's own proposals are
what is edited: the first change turns them into peaks that are asked for.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from PySide6.QtCore import QObject, Signal

from meseta import typeset
from meseta.errors import CallError, MesetaError
from meseta.recipe.peaks import PeakSettings, PeakStart

if TYPE_CHECKING:
    from meseta.peaks import PeakFit
    from meseta.window.session import Session

__all__ = ["TIES", "PeakEditor", "said_of"]

FWHM_IN_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
TIES = {
    "none": "positions free of one another",
    "multiples": "multiples of one conductance",
    "ladder": "multiples behind one series resistance",
}
"""How positions can be tied, in words."""


def said_of(start: PeakStart, settings: PeakSettings, number: int) -> str:
    """Return in words what is asked of a peak beyond where it begins; ``number`` is its place from below, from 1."""
    said = []
    if start.fixed:
        said.append("held")
    if start.fixed_width:
        said.append("width held")
    if start.low_g0 is not None or start.high_g0 is not None:
        said.append("bounded")
    if settings.tie != "none" and start.tied:
        multiple = float(number) if start.multiple is None else start.multiple
        said.append(f"{typeset.TIMES}{typeset.THIN_SPACE}{multiple:g}")
    return ", ".join(said) or "free"


class PeakEditor(QObject):
    """The peaks that the fit begins with, the chosen one among them, and all that can be done to them."""

    chosen_changed = Signal(int)
    """Place of the chosen peak from below, from 0; -1 where none is chosen."""

    def __init__(self, session: Session) -> None:
        super().__init__(session)
        self._session = session
        self.chosen = -1
        self.caret_u = float("nan")
        """Where the pointer last was on the axis as drawn, or where the keys moved it to."""
        session.hover_moved.connect(lambda hover: setattr(self, "caret_u", hover.u) if hover is not None else None)
        session.traces_changed.connect(lambda: self.choose(-1))
        session.document_changed.connect(lambda change: self._keep_in_range() if change.recipe else None)
        session.result_changed.connect(lambda name: self._keep_in_range() if name == "peaks" else None)

    @classmethod
    def of(cls, session: Session) -> PeakEditor:
        """Return the editor of a session; there is one."""
        found = session.findChild(cls)
        return found if isinstance(found, cls) else cls(session)

    # -- what there is -----------------------------------------------------------------------------------------------

    @property
    def settings(self) -> PeakSettings:
        """The settings of the fit."""
        return self._session.document.recipe.peaks

    @property
    def asked(self) -> bool:
        """Whether the peaks are asked for, and not proposed from the histogram."""
        return bool(self.settings.peaks)

    @property
    def fit(self) -> PeakFit | None:
        """The fit as last shown, where it has peaks."""
        fit: PeakFit | None = self._session.result("peaks")
        return fit if fit is not None and len(fit.table) and np.isfinite(fit.table.position_g0).any() else None

    def starts(self) -> list[PeakStart]:
        """Return the peaks asked for, else those proposed and fitted, sorted by conductance."""
        fit = self.fit
        if fit is None:
            return sorted(self.settings.peaks, key=lambda start: start.position_g0)
        from meseta.peaks import editable_peaks

        return editable_peaks(self.settings, fit.table)

    def row_of(self, place: int) -> int:
        """Return the row of the fit's table that belongs to a peak; -1 where the fit does not know it.

        A fit may leave out a peak that it was asked for (too few bins): rows then belong to the peaks nearest to them.
        """
        fit, starts = self.fit, self.starts()
        if fit is None or not 0 <= place < len(starts) or (self.asked and self._session.state("peaks") != "current"):
            return -1
        rows = np.flatnonzero(np.isfinite(fit.table.position_g0))
        if len(rows) == len(starts):
            return int(rows[place])
        begin = np.array([self.u_of(start.position_g0) for start in starts])
        near = {int(np.abs(begin - self.u_of(float(fit.table.position_g0[row]))).argmin()): int(row) for row in rows}
        return near.get(place, -1)

    def place_of(self, row: int) -> int:
        """Return the place of the peak in a row of the fit's table; -1 where it is none."""
        return next((place for place in range(len(self.starts())) if self.row_of(place) == row), -1)

    @property
    def not_fitted(self) -> str:
        """Why a peak has no row in the fit, in words."""
        current = self._session.state("peaks") == "current"
        return "not fitted: no counts, or too few bins, in its range" if current else "not fitted yet"

    def name_of(self, place: int) -> str:
        """Return how a peak is called."""
        starts = self.starts()
        name = starts[place].name if 0 <= place < len(starts) else ""
        return f"peak {name or place + 1}"

    # -- choosing ----------------------------------------------------------------------------------------------------

    def choose(self, place: int) -> None:
        """Choose a peak; -1 chooses none."""
        place = place if 0 <= place < len(self.starts()) else -1
        if place != self.chosen:
            self.chosen = place
            self.chosen_changed.emit(place)

    def step(self, by: int) -> None:
        """Choose the next peak up or down the axis, round at the ends."""
        count = len(self.starts())
        if count:
            self.choose((self.chosen + by) % count if self.chosen >= 0 else (0 if by > 0 else count - 1))

    def choose_near(self, u: float, reach: float) -> int:
        """Choose the peak nearest a height on the axis as drawn, if it is within reach; return its place or -1."""
        heights = [abs(self.u_of(self.position_of(place)) - u) for place in range(len(self.starts()))]
        near = int(np.argmin(heights)) if heights and min(heights) <= reach else -1
        if near >= 0:
            self.choose(near)
        return near

    def _keep_in_range(self) -> None:
        if self.chosen >= len(self.starts()):
            self.choose(len(self.starts()) - 1)

    # -- the axis ----------------------------------------------------------------------------------------------------

    @property
    def axis(self) -> str:
        """The axis of the fit: "linear" or "logarithmic"."""
        return self._session.axis if self.settings.axis == "as_histogram" else self.settings.axis

    def u_of(self, value_g0: float) -> float:
        """Return a conductance on the axis as drawn."""
        if self._session.axis == "logarithmic":
            return float(np.log10(value_g0)) if value_g0 > 0 else self._session.span.low
        return value_g0

    def g0_of(self, u: float) -> float:
        """Return the conductance at a height on the axis as drawn."""
        return float(10.0**u) if self._session.axis == "logarithmic" else float(u)

    def position_of(self, place: int) -> float:
        """Return where a peak stands: fitted where the fit knows it, else where it begins, in G0."""
        row, fit = self.row_of(place), self.fit
        if row >= 0 and fit is not None:
            return float(fit.table.position_g0[row])
        return self.starts()[place].position_g0

    # -- changing ----------------------------------------------------------------------------------------------------

    def add(self, position_g0: float) -> None:
        """Ask for one more peak, and choose it."""
        if self._session.traces is None or not 0 < position_g0 < np.inf:
            return
        new = PeakStart(position_g0=position_g0)
        starts = sorted([*self.starts(), new], key=lambda start: start.position_g0)
        self._write(f"add a peak at {typeset.conductance(position_g0)}", starts)
        self.chosen = -1
        self.choose(starts.index(new))

    def add_at_caret(self) -> None:
        """Ask for one more peak where the pointer or the caret last was, else in the middle of the view."""
        span = self._session.span
        inside = span.low <= self.caret_u <= span.high
        self.add(self.g0_of(self.caret_u if inside else (span.low + span.high) / 2))

    def remove(self, place: int) -> None:
        """Take a peak out of the fit; without the last one, peaks are proposed again."""
        starts = self.starts()
        if 0 <= place < len(starts):
            name = self.name_of(place)
            del starts[place]
            self._write(f"remove {name}" if starts else f"remove {name}: peaks are proposed again", starts)

    def move(self, place: int, position_g0: float, same: str = "") -> None:
        """Begin the fit of a peak elsewhere, within its bounds."""
        starts = self.starts()
        if not 0 <= place < len(starts) or not 0 < position_g0 < np.inf:
            self.chosen_changed.emit(self.chosen)  # handles go back
            return
        start, name = starts[place], self.name_of(place)
        low = -np.inf if start.low_g0 is None else start.low_g0
        high = np.inf if start.high_g0 is None else start.high_g0
        moved = start.model_copy(update={"position_g0": float(min(max(position_g0, low), high))})
        starts[place] = moved
        starts.sort(key=lambda one: one.position_g0)
        self._write(f"move {name} to {typeset.conductance(moved.position_g0)}", starts, same)
        self.chosen = -2
        self.choose(starts.index(moved))

    def nudge(self, steps: float) -> None:
        """Move the chosen peak along the axis by bins of the histogram."""
        if self.chosen < 0:
            return
        histogram = self._session.result("histogram")
        bin_u = 0.02 if histogram is None else float(np.median(histogram.grid.widths))
        u = self.u_of(self.starts()[self.chosen].position_g0 if self.asked else self.position_of(self.chosen))
        self.move(self.chosen, self.g0_of(u + steps * bin_u), same=f"peaks.move.{self.name_of(self.chosen)}")

    def hold(self, place: int, on: bool) -> None:
        """Hold a peak where it stands, or let the fit move it."""
        if on:
            self._update(place, "hold", fixed=True, position_g0=self.position_of(place))
        else:
            self._update(place, "free", fixed=False)

    def hold_width(self, place: int, on: bool) -> None:
        """Hold a peak's width as it is, or let the fit change it."""
        starts, row, fit = self.starts(), self.row_of(place), self.fit
        if not 0 <= place < len(starts):
            return
        width = starts[place].width
        if on and row >= 0 and fit is not None:
            width = _positive(float(fit.table.fwhm[row]) / FWHM_IN_SIGMA)
        if on and width is None:
            raise CallError(f"the width of {self.name_of(place)} is not known yet", "peaks", "wait for the fit")
        self._update(place, "hold the width of" if on else "free the width of", fixed_width=on, width=width)

    def bound(self, place: int, low_g0: float | None, high_g0: float | None) -> None:
        """Bound a peak's position; None leaves an end open.  A start outside moves to the nearer bound."""
        starts = self.starts()
        if 0 <= place < len(starts):
            low, high = low_g0 or 0.0, np.inf if high_g0 is None else high_g0
            inside = float(min(max(starts[place].position_g0, low), high))
            self._update(place, "bound", low_g0=low_g0, high_g0=high_g0, position_g0=inside)

    def replace(self, place: int, start: PeakStart) -> None:
        """Put another description in place of a peak's."""
        self._update(place, "edit", **start.model_dump())

    def tie(self, kind: str) -> None:
        """Tie the positions of all peaks, or free them."""
        text = "free the positions of the peaks" if kind == "none" else f"tie the peaks: {TIES[kind]}"
        self._set(text, self.starts() if self.asked or kind == "none" else self._to_tie(), tie=kind)

    def _to_tie(self) -> list[PeakStart]:
        """Return the proposed peaks, tied where they are near a multiple of G0."""
        return [start.model_copy(update={"tied": start.multiple is not None}) for start in self.starts()]

    def equal_widths(self, on: bool) -> None:
        """Make all peaks equally wide relative to their position, or free their widths."""
        text = "tie the widths of the peaks" if on else "free the widths of the peaks"
        self._set(text, self.starts() if on or self.asked else (), equal_relative_widths=on)

    def forget(self) -> None:
        """Ask for no peaks in particular: they are proposed from the histogram."""
        self._write("let the peaks be proposed", [])

    def _update(self, place: int, verb: str, **values: Any) -> None:
        starts = self.starts()
        if 0 <= place < len(starts):
            name = self.name_of(place)
            changed = PeakStart(**{**starts[place].model_dump(), **values})
            starts[place] = changed
            starts.sort(key=lambda one: one.position_g0)
            self._write(f"{verb} {name}", starts)
            self.choose(starts.index(changed))

    def _write(self, text: str, starts: Sequence[PeakStart], same: str = "") -> None:
        self._set(text, starts, same)

    def _set(self, text: str, starts: Sequence[PeakStart], same: str = "", **ties: Any) -> None:
        """Write peaks and ties as one step; where they do not go together the window says why, and nothing changes."""
        from meseta.peaks import edited_peaks

        session = self._session
        try:
            settings = edited_peaks(self.settings, starts, **ties)
        except MesetaError as error:
            session.problem.emit(error)
            self.chosen_changed.emit(self.chosen)
            return
        recipe = session.document.recipe.model_copy(update={"peaks": settings})
        session.change(text, replace(session.document, recipe=recipe), same)


def _positive(value: float) -> float | None:
    return value if np.isfinite(value) and value > 0 else None

"""The model of the window: what is open, what was decided, what is shown.  Views talk to it and never to each other.

The *document* (recipe, decisions, conditions) is frozen and goes through undo; everything else is looking: current
trace, span of the conductance axis, hover.  Results are kept as last shown, with the key they were made for, so that a
result out of date stays visible and is known to be so.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from PySide6.QtCore import QObject, Signal
from PySide6.QtGui import QUndoCommand, QUndoStack

from meseta.errors import MesetaError
from meseta.recipe import Recipe
from meseta.traces import TraceIdentity, TraceSet
from meseta.window.conditions import ConditionSet
from meseta.window.document import FROM_RAW, Change, Document, Hover, Span
from meseta.window.jobs import JobRunner
from meseta.window.pictures import SubsetPicture, TracePicture
from meseta.window.pipeline import Pipeline, Shown
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.selection import Decisions

__all__ = ["Change", "Document", "Hover", "Session", "Shown", "Span"]


class _ChangeCommand(QUndoCommand):
    """One change of the document; neighbouring changes of the same thing become one."""

    def __init__(self, session: Session, text: str, before: Document, after: Document, same: str = "") -> None:
        super().__init__(text)
        self._session, self._before, self._after, self._same = session, before, after, same

    def redo(self) -> None:
        """Apply the change."""
        self._session.adopt(self._after)

    def undo(self) -> None:
        """Take the change back."""
        self._session.adopt(self._before)

    def id(self) -> int:
        """Return one number for all changes of the same thing; -1 for those that never merge."""
        return hash(self._same) % 2_000_000_000 if self._same else -1

    def mergeWith(self, other: QUndoCommand) -> bool:
        """Take a later change of the same thing into this one."""
        if not isinstance(other, _ChangeCommand) or other._same != self._same:
            return False
        self._after = other._after
        self.setText(other.text())
        return True


UNDO_STEPS = 500
"""Steps of undo that are kept; each holds a whole document."""
Derive = Callable[[Recipe, Work], TraceSet]
"""Makes the traces anew by another calibration or cutting."""


class Session(QObject):
    """What is open and how it is looked at."""

    traces_changed = Signal()
    document_changed = Signal(object)
    current_changed = Signal(int)
    picture_changed = Signal(object)
    result_changed = Signal(str)
    states_changed = Signal()
    subset_changed = Signal(object)
    overlay_changed = Signal(object)
    part_2d_changed = Signal(object)
    condition_problem = Signal(object)
    hover_moved = Signal(object)
    span_changed = Signal(object)
    drive_span_changed = Signal(object)
    problem = Signal(object)
    saved_changed = Signal(bool)

    def __init__(self, jobs: JobRunner, recipe: Recipe | None = None, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self.jobs = jobs
        self.document = Document(recipe or Recipe())
        self.undo = QUndoStack(self)
        self.undo.setUndoLimit(UNDO_STEPS)
        self.analysis: Analysis | None = None
        self.name = ""
        self.study_path: str = ""
        self.derive: Derive | None = None
        self.made_by = self.document.recipe
        self.growing = self._placed = False
        self.current = -1
        self.picture: TracePicture | None = None
        self.subset: SubsetPicture | None = None
        self.shown: dict[str, Shown] = {}
        self.errors: dict[str, MesetaError] = {}
        self.span = Span(-6.5, 1.2)
        self.drive_span = (-0.5, 2.0)
        self._drag_from: Document | None = None
        self._keys: dict[str, str] = {}
        self._keys_of: Analysis | None = None
        self._rows: dict[str, int] = {}
        self._rows_key = ""
        self.pipeline = Pipeline(self, jobs)
        self.undo.cleanChanged.connect(self.saved_changed)

    # -- what is open -----------------------------------------------------------------------------------------------

    @property
    def traces(self) -> TraceSet | None:
        """The open traces; None where nothing is open."""
        return None if self.analysis is None else self.analysis.traces

    @property
    def axis(self) -> str:
        """The conductance axis as drawn: "linear" or "logarithmic"."""
        return self.document.recipe.histogram.axis

    def open_traces(
        self,
        traces: TraceSet,
        name: str,
        document: Document | None = None,
        *,
        study_path: str = "",
        derive: Derive | None = None,
        growing: bool = False,
    ) -> None:
        """Show other traces; undo begins anew.

        Parameters
        ----------
        traces : TraceSet
        name : str
        document : Document, optional
        study_path : str
            The study that they live in.
        derive : callable, optional
            (recipe, work) -> the traces as another calibration or cutting makes them; without it they stay as they are.
        growing : bool
            Whether more of them are being read.
        """
        self.jobs.cancel(spare_files=growing)
        self.undo.clear()
        self.document = document or Document(self.document.recipe)
        from meseta.analysis import Analysis

        self.analysis = Analysis(traces, self.document.recipe, self.document.decisions)
        self.name, self.study_path = name, study_path
        self.derive, self.made_by, self.growing = derive, self.document.recipe, growing
        self._placed = False
        self.shown, self.errors, self.subset, self.picture = {}, {}, None, None
        self.span = self.default_span()
        self.drive_span = self.default_drive_span()
        self.traces_changed.emit()
        self.span_changed.emit(self.span)
        self.drive_span_changed.emit(self.drive_span)
        self.current = -1
        self.go_to(0)
        self.pipeline.refresh()
        self.pipeline.refresh_subset()

    def close_traces(self) -> None:
        """Show nothing; undo begins anew."""
        self.jobs.cancel()
        self.undo.clear()
        self.analysis = self.derive = None
        self.document = Document(self.document.recipe)
        self.name = self.study_path = ""
        self.growing = False
        self.shown, self.errors, self.subset, self.picture, self.current = {}, {}, None, None, -1
        self.traces_changed.emit()
        self.take_subset(None)
        self.overlay_changed.emit(None)
        self.states_changed.emit()

    def replace_traces(self, traces: TraceSet, made_by: Recipe, *, growing: bool = False) -> None:
        """Take other traces of the same recordings: more of them, or made by another calibration or cutting.

        What is shown stays, out of date, until it is replaced; the current trace stays the same one, wherever it is.
        """
        if self.analysis is None or self.traces is None:
            return
        unit, here = self.drive_unit, self.traces.identity(self.current) if self.current >= 0 else None
        self.analysis = self.analysis.with_traces(traces)
        self.made_by, self.growing = made_by, growing
        if self.drive_unit != unit:
            self.shown.pop("displacement_histogram", None)
        self.current = self._row_now(here)
        self.traces_changed.emit()
        self.current_changed.emit(self.current)
        if self.drive_unit != unit:
            self.set_drive_span(*self.default_drive_span())
        self.pipeline.refresh()
        self.pipeline.refresh_trace()
        self.pipeline.refresh_subset()

    def _row_now(self, here: TraceIdentity | None) -> int:
        assert self.traces is not None
        if here is not None and self.current < self.traces.traces and self.traces.identity(self.current) == here:
            return self.current  # as after traces were added behind the others
        row = -1 if here is None else self.traces.row_of(here)
        return row if row >= 0 else min(max(self.current, 0), self.traces.traces - 1)

    @property
    def unmade(self) -> tuple[str, ...]:
        """Sections of the recipe by which the open traces are not yet made."""
        if self.derive is None or self.analysis is None:
            return ()
        now, then = self.document.recipe, self.made_by
        return tuple(name for name in FROM_RAW if now.key((name,)) != then.key((name,)))

    @property
    def drive_unit(self) -> str:
        """Unit of the displacement axis."""
        return "nm" if self.traces is None else self.traces.drive.unit

    # -- changing the document --------------------------------------------------------------------------------------

    def change(self, text: str, document: Document, same: str = "") -> None:
        """Change the document, undoable under a readable name.

        Parameters
        ----------
        text : str
            What was done, as undo shows it ("change Sensitivity to 6").
        document : Document
        same : str
            Where not empty, neighbouring changes of this same thing become one step of undo.
        """
        if document != self.document:
            self.undo.push(_ChangeCommand(self, text, self.document, document, same))

    def change_setting(self, section: str, name: str, value: Any, title: str) -> None:
        """Change one setting of the recipe.

        Raises
        ------
        RecipeError
            Where the value is not allowed.
        """
        recipe = self.document.recipe.with_values(section, **{name: value})
        self.change(f"change {title}", replace(self.document, recipe=recipe), same=f"{section}.{name}")

    def change_recipe(self, text: str, recipe: Recipe) -> None:
        """Change the whole recipe."""
        self.change(text, replace(self.document, recipe=recipe))

    def change_decisions(self, text: str, decisions: Decisions) -> None:
        """Change what was decided by hand."""
        self.change(text, replace(self.document, decisions=decisions))

    def change_conditions(self, text: str, conditions: ConditionSet) -> None:
        """Change the conditions."""
        self.change(text, replace(self.document, conditions=conditions))

    def drag(self, document: Document) -> None:
        """Show a document while something is dragged; :meth:`settle` makes it a step of undo."""
        if self._drag_from is None:
            self._drag_from = self.document
        self.adopt(document)

    @property
    def dragging(self) -> bool:
        """Whether something is being dragged: costly pictures wait for its end."""
        return self._drag_from is not None

    def settle(self, text: str) -> None:
        """End a drag."""
        before, self._drag_from = self._drag_from, None
        if self.subset is not None:
            self.pipeline.refresh_costly(self.subset.mask)
        if before is not None and before != self.document:
            self.undo.push(_ChangeCommand(self, text, before, self.document))

    def adopt(self, document: Document) -> None:
        """Make a document the current one; called by undo and drags only."""
        before, self.document = self.document, document
        change = Change(before, document)
        if not (change.recipe or change.decisions or change.conditions):
            return
        if self.analysis is not None and (change.recipe or change.decisions):
            self.analysis = self.analysis.with_recipe(document.recipe).with_decisions(document.decisions)
        axis_changed = before.recipe.histogram.axis != document.recipe.histogram.axis
        if axis_changed:
            self.set_span(self.default_span())
        self.document_changed.emit(change)
        if change.recipe or change.decisions:
            self.pipeline.refresh()
            self.pipeline.refresh_trace()
        if change.conditions or change.recipe or change.decisions:
            self.pipeline.refresh_subset()

    # -- looking -----------------------------------------------------------------------------------------------------

    def go_to(self, trace: int) -> None:
        """Make another trace the current one; numbers beyond the ends stop there."""
        traces = self.traces
        if traces is None or not traces.traces:
            return
        trace = min(max(int(trace), 0), traces.traces - 1)
        if trace == self.current:
            return
        self.current = trace
        self.current_changed.emit(trace)
        self.pipeline.refresh_trace()

    def step(self, by: int, among: npt.NDArray[np.bool_] | None = None) -> None:
        """Go forward or back by traces of the analysed direction, or by those in ``among``."""
        if among is None and self.traces is not None:
            among = self.traces.table["direction"] == self.document.recipe.histogram.direction
        rows = np.flatnonzero(among if among is not None else [])
        if not len(rows):
            return
        place = int(np.searchsorted(rows, self.current, side="right" if by > 0 else "left"))
        self.go_to(int(rows[min(max(place + (by - 1 if by > 0 else by), 0), len(rows) - 1)]))

    def set_span(self, span: Span) -> None:
        """Show another part of the conductance axis."""
        if not (np.isfinite(span.low) and np.isfinite(span.high)) or span.high - span.low < 1e-6:
            return
        limit = 60.0 if self.axis == "logarithmic" else 1e6
        if span.high - span.low > limit or span == self.span:
            return
        self.span = span
        self.span_changed.emit(span)

    def look_from(self, span: Span, drive_span: tuple[float, float]) -> None:
        """Show parts of both axes that the first results shall not change."""
        self._placed = True
        self.set_span(span)
        self.set_drive_span(*drive_span)

    def set_drive_span(self, low: float, high: float) -> None:
        """Show another part of the displacement axis."""
        if np.isfinite(low) and np.isfinite(high) and 1e-9 < high - low < 1e9 and (low, high) != self.drive_span:
            self.drive_span = (low, high)
            self.drive_span_changed.emit(self.drive_span)

    def default_span(self) -> Span:
        """Return the whole conductance axis of the histogram, or a guess while it is unknown."""
        for name in ("histogram", "counts"):
            shown = self.shown.get(name)
            if shown is not None and shown.result.grid.axis == self.axis:
                edges = shown.result.grid.u_edges
                margin = 0.02 * float(edges[-1] - edges[0])
                return Span(float(edges[0]) - margin, float(edges[-1]) + margin)
        settings = self.document.recipe.histogram
        if self.axis == "linear":
            low, high = settings.low_g0 or 0.0, min(settings.high_g0, 5.0)
            return Span(low - 0.02 * (high - low), high + 0.02 * (high - low))
        low = settings.low_g0 if settings.low_g0 and settings.low_g0 > 0 else 3e-7
        return Span(float(np.log10(low)), float(np.log10(settings.high_g0)) + 0.1)

    def default_drive_span(self) -> tuple[float, float]:
        """Return the displacement axis of the 2D histogram as last shown, else that of the recipe."""
        shown = self.result("displacement_histogram")
        if shown is not None:
            return float(shown.drive_edges[0]), float(shown.drive_edges[-1])
        settings = self.document.recipe.displacement_histogram
        return settings.low_nm, settings.high_nm

    def hover(self, hover: Hover | None) -> None:
        """Tell where the pointer is, or that it left the plots."""
        self.hover_moved.emit(hover)

    # -- results -----------------------------------------------------------------------------------------------------

    def result(self, name: str) -> Any:
        """Return a result as last shown, whether current or not; None where there is none."""
        shown = self.shown.get(name)
        return None if shown is None else shown.result

    def _key(self, name: str) -> str:
        """Return the key that a current result must have; worked out once for each analysis."""
        assert self.analysis is not None
        if self._keys_of is not self.analysis:
            self._keys_of, self._keys = self.analysis, {}
        if name not in self._keys:
            self._keys[name] = self.analysis.key(name)
        return self._keys[name]

    def state(self, name: str) -> str:
        """Return "none", "current", "out of date", "working" or "failed" of a step's result."""
        if self.analysis is None:
            return "none"
        if name in self.errors:
            return "failed"
        shown = self.shown.get(name)
        current = shown is not None and not shown.provisional and shown.key == self._key(name)
        if current and not self.unmade:
            return "current"
        if self.pipeline.working and name in self.pipeline.names:
            return "working"
        return "none" if shown is None else "out of date"

    def take_result(self, name: str, shown: Shown) -> None:
        """Show a result that has arrived."""
        first = name not in self.shown and not self._placed
        self.shown[name] = shown
        self.errors.pop(name, None)
        if name in ("counts", "histogram") and first:
            self.set_span(self.default_span())
        if name == "displacement_histogram" and first:
            self.set_drive_span(*self.default_drive_span())
        self.result_changed.emit(name)

    def take_error(self, name: str, error: MesetaError) -> None:
        """Remember an error where it happened, and show it."""
        self.errors[name] = error
        self.states_changed.emit()
        self.problem.emit(error)

    def take_picture(self, picture: TracePicture) -> None:
        """Show the current trace."""
        if picture.trace == self.current:
            self.picture = picture
            self.picture_changed.emit(picture)

    def take_subset(self, subset: SubsetPicture | None) -> None:
        """Show what the conditions pick."""
        self.subset = subset
        self.subset_changed.emit(subset)

    def take_condition_error(self, error: MesetaError) -> None:
        """Show an error of the conditions beside them."""
        self.take_subset(None)
        self.condition_problem.emit(error)

    def rows_of(self, identities: set[str]) -> dict[str, int]:
        """Return the rows of the traces with these identities; looked up once for the open traces."""
        if self.traces is None:
            return {}
        if self._rows_key != self.traces.key:
            self._rows = {identity: row for row, identity in enumerate(self.traces.identities())}
            self._rows_key = self.traces.key
        return {identity: self._rows[identity] for identity in identities if identity in self._rows}

    @property
    def kept(self) -> npt.NDArray[np.bool_] | None:
        """(traces,) bool of the selection as last shown, where it fits the open traces."""
        selection = self.result("selection")
        if selection is None or self.traces is None or len(selection.kept) != self.traces.traces:
            return None
        kept: npt.NDArray[np.bool_] = selection.kept
        return kept

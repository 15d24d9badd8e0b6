"""What is computed when: from a change of the model to requests, and from responses back into the model."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from PySide6.QtCore import QObject

from meseta.errors import Cancelled, MesetaError
from meseta.traces import TraceSet
from meseta.window.jobs import Channel, JobRunner
from meseta.window.pictures import (
    OverlayPicture,
    SubsetPicture,
    displacement_histogram_of,
    histogram_of,
    overlay_picture,
    trace_picture,
)
from meseta.window.subset import mask_of
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.window.session import Session

__all__ = ["DERIVE", "OVERLAY", "PICTURE", "RESULTS", "SUBSET", "SUBSET_2D", "Pipeline", "Shown"]

RESULTS = Channel("results")
"""All steps of the analysis."""
DERIVE = Channel("derive")
"""The traces, by another calibration or cutting."""
PICTURE = Channel("picture", quick=True, shown=False)
"""The current trace."""
SUBSET = Channel("subset", quick=True, shown=False)
"""What the conditions pick."""
OVERLAY = Channel("overlay", quick=True, shown=False)
"""The traces that the conditions pick, as lines."""
SUBSET_2D = Channel("subset_2d", quick=True)
"""The 2D histogram of the traces that the conditions pick."""

ORDER = (
    "alignment",
    "noise",
    "counts",
    "plateaus",
    "measures",
    "selection",
    "displacement_histogram",
    "resampling",
    "histogram",
    "peaks",
)
"""Steps whose results the frame always shows, in the order in which a user wants to see them."""


FIRST = ("alignment", "noise", "counts")
"""Steps that are worked out while more traces are being read: enough for the distribution of what is there."""


@dataclass(frozen=True)
class Shown:
    """A result as last shown: for which key it was made, and whether it is provisional."""

    result: Any
    key: str
    provisional: bool = False


@dataclass(frozen=True)
class StepOutcome:
    """A step's result or its error, on its way to the window."""

    name: str
    shown: Shown | None = None
    error: MesetaError | None = None


def run_steps(
    analysis: Analysis,
    names: tuple[str, ...],
    known: Mapping[str, str],
    work: Work,
    tell: Callable[[StepOutcome], None],
) -> None:
    """Compute steps in order and tell each outcome as soon as it is there.

    Parameters
    ----------
    analysis : Analysis
    names : tuple of str
        Steps to bring up to date.
    known : mapping of str to str
        Keys of the results that the window shows already; these are not told again.
    work : Work
    tell : callable
        Takes each :class:`StepOutcome`.

    Notes
    -----
    A provisional histogram over all traces is told as soon as the counts are there, and one without a band as soon as
    the selection is: the picture stands before the intervals do.
    """
    failed: set[str] = set()
    for name in names:
        if failed & _all_needs(name):
            failed.add(name)
            continue
        key = analysis.key(name)
        try:
            result = analysis.result(name, work)
        except Cancelled:
            raise
        except MesetaError as error:
            failed.add(name)
            tell(StepOutcome(name, error=error))
            continue
        if known.get(name) != key:
            tell(StepOutcome(name, Shown(result, key)))
        if name in ("counts", "selection") and not analysis.ready("histogram"):
            mask = result.kept if name == "selection" else result.used
            tell(StepOutcome("histogram", Shown(histogram_of(analysis, mask, work), "", provisional=True)))


def _all_needs(name: str) -> set[str]:
    """Return every step that a step takes, directly or not."""
    from meseta.analysis import STEPS

    needs = set(STEPS[name].needs) & set(STEPS)
    return needs.union(*(_all_needs(needed) for needed in needs)) if needs else needs


class Pipeline(QObject):
    """Makes requests from the model's state and hands responses back to the model."""

    def __init__(self, session: Session, jobs: JobRunner) -> None:
        super().__init__(session)
        self._session, self._jobs = session, jobs
        self._wanted: dict[str, tuple[str, ...]] = {}
        self._trace_again = False

    def want(self, view: str, names: tuple[str, ...]) -> None:
        """Have further steps computed while a view that shows them is visible; no names where it is hidden."""
        if self._wanted.get(view, ()) != names:
            self._wanted[view] = names
            if names:
                self.refresh()

    @property
    def names(self) -> tuple[str, ...]:
        """Steps that are computed: those of the frame, then those that visible views ask for."""
        if self._session.growing:
            return FIRST
        extra = dict.fromkeys(name for names in self._wanted.values() for name in names if name not in ORDER)
        return ORDER + tuple(extra)

    def refresh(self) -> None:
        """Bring all shown results up to date, after the traces where these must be made anew."""
        session = self._session
        analysis = session.analysis
        if analysis is None:
            return
        if session.unmade:
            self._derive()
            return
        self._jobs.cancel(DERIVE)
        names = self.names
        known = {name: shown.key for name, shown in session.shown.items() if not shown.provisional}
        session.errors.clear()

        def task(work: Work, part: Callable[[Any], None]) -> None:
            run_steps(analysis, names, known, work, part)

        self._jobs.submit(
            RESULTS,
            "analysing",
            task,
            done=lambda _: session.states_changed.emit(),
            failed=session.problem.emit,
            part=self._take_outcome,
        )
        session.states_changed.emit()

    @property
    def working(self) -> bool:
        """Whether results or traces are being worked out."""
        return self._jobs.runs(RESULTS) or self._jobs.runs(DERIVE)

    def _derive(self) -> None:
        """Make the traces anew by the calibration and cutting as they are set now."""
        session = self._session
        derive, recipe = session.derive, session.document.recipe
        assert derive is not None
        self._jobs.cancel(RESULTS)
        session.errors.clear()

        def task(work: Work, _: Callable[[Any], None]) -> TraceSet:
            return derive(recipe, work)

        self._jobs.submit(
            DERIVE,
            "making the traces anew",
            task,
            done=lambda traces: session.replace_traces(traces, recipe),
            failed=lambda error: session.take_error("traces", error),
        )
        session.states_changed.emit()

    def _take_outcome(self, outcome: StepOutcome) -> None:
        session = self._session
        if outcome.error is not None:
            session.take_error(outcome.name, outcome.error)
            return
        assert outcome.shown is not None
        session.take_result(outcome.name, outcome.shown)
        if outcome.name in ("alignment", "noise", "plateaus"):
            self.refresh_trace()
        if outcome.name in ("counts", "measures", "selection", "displacement_histogram"):
            self.refresh_subset()
        session.states_changed.emit()

    def refresh_trace(self) -> None:
        """Draw the current trace again, with what is known of it now."""
        session = self._session
        analysis, trace = session.analysis, session.current
        if analysis is None or trace < 0:
            return

        def task(work: Work, _: Callable[[Any], None]) -> Any:
            return trace_picture(analysis, trace, work)

        self._jobs.submit(PICTURE, f"trace {trace}", task, done=session.take_picture, failed=session.problem.emit)

    def refresh_subset(self) -> None:
        """Find which traces the conditions pick, and their own distribution."""
        session = self._session
        analysis, conditions = session.analysis, session.document.conditions
        rule, sentence = conditions.rule(), conditions.sentence()
        if analysis is None or not rule:
            for channel in (SUBSET, OVERLAY, SUBSET_2D):
                self._jobs.cancel(channel)
            session.take_subset(None)
            session.overlay_changed.emit(None)
            session.part_2d_changed.emit(None)
            return
        if not all(map(analysis.ready, ("counts", "plateaus", "measures"))):
            return

        def task(work: Work, _: Callable[[Any], None]) -> SubsetPicture:
            kept = analysis.result("selection", work).kept if analysis.ready("selection") else None
            mask = mask_of(analysis, rule, work)
            mask = mask if kept is None else mask & kept
            of = analysis.traces.traces if kept is None else int(np.count_nonzero(kept))
            return SubsetPicture(mask, of, histogram_of(analysis, mask, work), sentence)

        def done(subset: SubsetPicture) -> None:
            session.take_subset(subset)
            if not session.dragging:
                self.refresh_costly(subset.mask)

        self._jobs.submit(SUBSET, "conditions", task, done=done, failed=session.take_condition_error)

    def refresh_costly(self, mask: npt.NDArray[np.bool_]) -> None:
        """Draw what takes longer than a frame, once nothing is dragged: lines and the 2D histogram."""
        self._refresh_overlay(mask)
        analysis, session = self._session.analysis, self._session
        if analysis is None or not analysis.ready("displacement_all"):
            return

        def task(work: Work, _: Callable[[Any], None]) -> Any:
            return displacement_histogram_of(analysis, mask, work)

        self._jobs.submit(
            SUBSET_2D, "building the 2D histogram", task, session.part_2d_changed.emit, session.problem.emit
        )

    def _refresh_overlay(self, mask: npt.NDArray[np.bool_]) -> None:
        """Draw the traces that the conditions pick."""
        session = self._session
        analysis, rows = session.analysis, np.flatnonzero(mask)
        if analysis is None:
            return

        def task(work: Work, _: Callable[[Any], None]) -> OverlayPicture:
            return overlay_picture(analysis, rows, work)

        self._jobs.submit(OVERLAY, "overlay", task, done=session.overlay_changed.emit, failed=session.problem.emit)

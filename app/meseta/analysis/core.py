"""Analysis: a recipe over a set of traces; results are worked out when asked for, once."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

from meseta.analysis.kept import KeptResults
from meseta.analysis.steps import STEPS, Inputs, SettingsView, Step, sliced
from meseta.errors import CallError, nearest
from meseta.histograms import ConductanceHistogram
from meseta.recipe import Recipe
from meseta.segmentation import NoiseModel, PlateauTable
from meseta.selection import Decisions, Selection
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["Analysis"]


@dataclass(frozen=True)
class Analysis:
    """The steps of a recipe over a set of traces.  Immutable; results are computed when asked for, once.

    Parameters
    ----------
    traces : TraceSet
    recipe : Recipe
    decisions : Decisions
        What was decided by hand.
    """

    traces: TraceSet
    recipe: Recipe = field(default_factory=Recipe)
    decisions: Decisions = field(default_factory=Decisions)
    _store: KeptResults = field(default_factory=KeptResults, repr=False, compare=False)

    def with_recipe(self, recipe: Recipe) -> Analysis:
        """Return the analysis with another recipe; results whose settings did not change are kept."""
        return Analysis(self.traces, recipe, self.decisions, self._store)

    def with_decisions(self, decisions: Decisions) -> Analysis:
        """Return the analysis with other decisions by hand."""
        return Analysis(self.traces, self.recipe, decisions, self._store)

    def with_traces(self, traces: TraceSet) -> Analysis:
        """Return the analysis over other traces (a corrected calibration, more files).

        Nothing of single blocks is carried over: plateaus and measures rest on the noise of all traces, and to count a
        block's samples costs less than to make sure that they are the same.
        """
        return Analysis(traces, self.recipe, self.decisions, self._store)

    def key(self, name: str) -> str:
        """Return the key of a step's result: equal keys mean equal results."""
        if name == "decisions":
            return self.decisions.key()
        step = _step(name)
        parts = [self.traces.key, name, str(step.version), self.recipe.key(step.settings)]
        parts += [self.key(needed) for needed in step.needed(self.recipe)]
        return hashlib.sha256("\n".join(parts).encode()).hexdigest()

    def ready(self, name: str) -> bool:
        """Return whether a step's result is at hand."""
        return self._store.get(name, self.key(name)) is not None

    def result(self, name: str, work: Work | None = None) -> Any:
        """Return the result of a step, computing it and what it needs if they are not at hand.

        Parameters
        ----------
        name : str
            A name in :data:`STEPS`.
        work : Work, optional
            Threads, progress, cancel.

        Raises
        ------
        CallError
            Where there is no such step.
        Cancelled
            Where the user stopped the work.
        """
        if name == "decisions":
            return self.decisions
        step, key, work = _step(name), self.key(name), work or Work()
        found = self._store.get(name, key)
        if found is not None:
            return found
        inputs = {needed: self.result(needed, work) for needed in step.needed(self.recipe)}
        work.check()
        view = SettingsView(self.recipe, step.settings)
        result = step.combine(self._parts(step, view, inputs, work), self.traces, view, inputs, work)
        self._store.put(name, key, result)
        return result

    def _parts(self, step: Step, view: SettingsView, inputs: Inputs, work: Work) -> Iterator[Any]:
        if step.block is None:
            return iter(())
        block, source = step.block, self.traces.only(*step.channels)
        spans = source.blocks(work)

        def one(span: tuple[int, int]) -> Any:
            return block(source.block(*span), view, sliced(inputs, *span))

        return work.each(one, spans, step.title, sizes=[last - first for first, last in spans])

    def preview(self, name: str, trace: int, work: Work | None = None) -> Any:
        """Return a step's result for one trace alone, by the same ``block`` function that does all traces.

        What the step needs of the whole recording (the noise model, say) is taken as it stands or computed.
        """
        step, work = _step(name), work or Work()
        if step.block is None:
            raise CallError(f"'{step.title}' looks at all traces together", "preview", "ask for its result")
        inputs: dict[str, Any] = {}
        for needed in step.needed(self.recipe):
            per_trace = needed in STEPS and STEPS[needed].block is not None and needed != "noise"
            inputs[needed] = (
                self.preview(needed, trace, work)
                if per_trace and not self.ready(needed)
                else sliced({needed: self.result(needed, work)}, trace, trace + 1)[needed]
            )
        view = SettingsView(self.recipe, step.settings)
        one = self.traces.only(*step.channels).block(trace, trace + 1)
        return step.combine(iter([step.block(one, view, inputs)]), one, view, inputs, work.quiet())

    # Typed shorthands for the results that users ask for by name.

    def noise(self, work: Work | None = None) -> NoiseModel:
        """Return the noise model of the recording."""
        result: NoiseModel = self.result("noise", work)
        return result

    def plateaus(self, work: Work | None = None) -> PlateauTable:
        """Return the plateaus of all traces."""
        result: PlateauTable = self.result("plateaus", work)
        return result

    def selection(self, work: Work | None = None) -> Selection:
        """Return which traces take part, and why others do not."""
        result: Selection = self.result("selection", work)
        return result

    def histogram(self, work: Work | None = None) -> ConductanceHistogram:
        """Return the 1D conductance histogram of the selected traces."""
        result: ConductanceHistogram = self.result("histogram", work)
        return result


def _step(name: str) -> Step:
    try:
        return STEPS[name]
    except KeyError:
        raise CallError(f"there is no step '{name}'", "analysis", nearest(name, STEPS)) from None

"""What rules are asked of: the traces, what was measured on them, and what was decided by hand."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from meseta.segmentation import PlateauTable, TraceMeasures
from meseta.selection.decisions import Decisions
from meseta.traces import PHASE_KINDS, TraceSet
from meseta.work import Work

__all__ = ["Facts"]

Floats = npt.NDArray[np.float64]
Truths = npt.NDArray[np.bool_]
EVERYWHERE = (float("-inf"), float("inf"))
BLOCK_SAMPLES = 4_000_000


@dataclass(frozen=True)
class Facts:
    """Traces with their measures, plateaus and decisions; one value a trace for every question.

    Numbers are NaN where a quantity could not be measured.
    """

    traces: TraceSet
    measures: TraceMeasures
    plateaus: PlateauTable
    decisions: Decisions

    @cached_property
    def row_of(self) -> dict[str, int]:
        """Row of every trace by its identity."""
        return {identity: row for row, identity in enumerate(self.traces.identities())}

    def in_nm(self, values: Floats) -> Floats:
        """Return drive values where the drive is a displacement in nm, else NaN."""
        return values if self.traces.drive.is_displacement else np.full(len(values), np.nan)

    def rows(self, identities: Iterable[str]) -> npt.NDArray[np.int64]:
        """Return the rows of the traces among ``identities`` that are here, sorted."""
        found = (self.row_of[identity] for identity in identities if identity in self.row_of)
        return np.array(sorted(found), np.int64)

    def members(self, group: str) -> Truths:
        """Return which traces belong to a group."""
        inside = np.zeros(self.traces.traces, np.bool_)
        if group in self.decisions.groups:
            inside[self.rows(self.decisions.groups[group].members)] = True
        return inside

    def chosen_plateaus(
        self, bounds_g0: tuple[float, float], kind: str, place: tuple[float, float] = EVERYWHERE
    ) -> Truths:
        """Return which plateaus have their conductance in a half-open window and are of a kind ("" for any).

        ``place`` is a half-open window of the drive in its own unit, counted from the zero, for the middle of the
        plateau; a plateau whose trace has no zero lies in none.
        """
        level = self.plateaus.level_g0
        chosen: Truths = (level >= bounds_g0[0]) & (level < bounds_g0[1])
        if place != EVERYWHERE:
            chosen = chosen & (self.plateau_middle >= place[0]) & (self.plateau_middle < place[1])
            chosen = chosen & self.plateaus.aligned
        return chosen & (self.plateaus.kind == kind) if kind else chosen

    @cached_property
    def plateau_middle(self) -> Floats:
        """(plateaus,) float64, middle of each plateau in the unit of the drive, from the zero of its trace."""
        table, drive = self.plateaus, self.traces.drive
        if drive.is_displacement:
            return (table.displacement_start_nm + table.displacement_stop_nm) / 2
        last = np.maximum(table.stop - 1, table.start)
        if drive.relative is None:
            middle = drive.step[table.trace] * (table.start + last) / 2
        else:
            relative, begin = drive.relative, self.traces.offsets[table.trace]
            ends = [
                [float(relative.read(int(at), int(at) + 1)[0]) for at in begin + edge] for edge in (table.start, last)
            ]
            middle = (np.array(ends[0]) + np.array(ends[1])) / 2
        return np.asarray(middle - self.measures.rupture_drive[table.trace], np.float64)

    def samples_inside(self, bounds_g0: tuple[float, float], place: tuple[float, float] = EVERYWHERE) -> Floats:
        """Return how many samples of each trace lie in two half-open windows: conductance, and drive from the zero.

        Only pulls and pushes count, as in the 2D histogram.
        """
        from meseta.selection.kernels import count_inside

        traces, counts = self.traces, np.zeros(self.traces.traces)
        start, stop = traces.phase_range(("pull", "push"))
        everywhere = place == EVERYWHERE
        zero = np.zeros(traces.traces) if everywhere else np.asarray(self.measures.rupture_drive, np.float64)
        for first, last in traces.blocks(Work(block_samples=BLOCK_SAMPLES)):
            begin = traces.offsets[first:last] - traces.offsets[first]
            relative = np.empty(0, np.float32)
            if traces.drive.relative is not None and not everywhere:
                lo, hi = int(traces.offsets[first]), int(traces.offsets[last])
                relative = np.ascontiguousarray(traces.drive.relative.read(lo, hi), np.float32)
            count_inside(
                np.ascontiguousarray(traces.read("conductance", first, last), np.float32),
                begin + start[first:last],
                begin + stop[first:last],
                begin,
                np.nan_to_num(traces.drive.step[first:last]),
                relative,
                zero[first:last],
                *bounds_g0,
                *place,
                counts[first:last],
            )
        return counts

    def count_plateaus(self, chosen: Truths) -> Floats:
        """Return the number of chosen plateaus in each trace."""
        return np.bincount(self.plateaus.trace[chosen], minlength=self.traces.traces).astype(np.float64)

    def longest_plateau(self, chosen: Truths) -> Floats:
        """Return the length of the longest chosen plateau in drive units; 0 where the trace has none."""
        longest = np.zeros(self.traces.traces)
        np.maximum.at(longest, self.plateaus.trace[chosen], self.plateaus.length_drive[chosen])
        return longest

    def of_last_plateau(self, values: Floats) -> Floats:
        """Return a plateau column for the last plateau of each trace; NaN where there is none."""
        result = np.full(self.traces.traces, np.nan)
        last = self.plateaus.number == 1
        result[self.plateaus.trace[last]] = values[last]
        return result

    def has_phase(self, kind: str) -> Truths:
        """Return which traces have a phase of this kind."""
        has = np.zeros(self.traces.traces, np.bool_)
        has[self.traces.phases.trace[self.traces.phases.kind == PHASE_KINDS.index(kind)]] = True
        return has

    def since_event(self, text: str) -> Floats:
        """Return the row of the last event with this text at or before each trace; NaN before the first."""
        rows = self.rows(event.identity for event in self.decisions.events if event.text == text)
        place = np.searchsorted(rows, np.arange(self.traces.traces), side="right")
        return np.concatenate([[np.nan], rows.astype(np.float64)])[place]

    def traces_since(self, text: str) -> Floats:
        """Return the number of traces since the last event with this text; NaN before the first."""
        return np.arange(self.traces.traces) - self.since_event(text)

    def seconds_since(self, text: str) -> Floats:
        """Return the seconds since the last event with this text; NaN before it or where times are unknown."""
        row, time = self.since_event(text), np.asarray(self.traces.table["time_second"], np.float64)
        known = ~np.isnan(row)
        result = np.full(self.traces.traces, np.nan)
        result[known] = time[known] - time[row[known].astype(np.int64)]
        return result

    def hours(self) -> Floats:
        """Return the hours since the first trace of the record."""
        time = np.asarray(self.traces.table["time_second"], np.float64)
        known = time[~np.isnan(time)]
        return (time - known.min()) / 3600 if len(known) else time

    def place(self) -> Floats:
        """Return the place in the record: 0 for the first trace, 1 for the last."""
        return np.arange(self.traces.traces) / max(self.traces.traces - 1, 1)

    def file(self) -> npt.NDArray[np.str_]:
        """Return the name of the recording that each trace comes from."""
        names = np.array([source.name for source in self.traces.sources] or [""])
        return names[self.traces.table["source"]]

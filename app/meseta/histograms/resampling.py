"""Resampling: which traces stand for how many independent ones, and data sets drawn accordingly.

Three schemes, after what was replicated:

specimens
    Whole specimens are drawn with replacement, each with all its traces (not traces within them as well: the spread of
    specimen means already has the spread within; Davison and Hinkley, Bootstrap Methods and their Application (1997),
    section 3.8).
blocks
    Circular moving blocks of consecutive traces (Politis and Romano, in Exploring the Limits of Bootstrap (1992), 263),
    so that memory along the record is in the intervals.  Of many candidate draws those are taken whose mean time is the
    record's: a linear drift along the record is then the same in all replicates and does not count as scatter.
traces
    Independent traces.

Few blocks or specimens show too small a spread, and their spread is itself uncertain.  Both are made good by one
factor for all deviations (:attr:`Resampling.widen`): the square root of the share of the variance that is expected to
be missing, times the ratio of the t quantile to the normal one.  Coverage is measured in the tests.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.histograms import counting_kernels, resampling_kernels
from meseta.histograms.memory import Memory, memory_of, record_features
from meseta.histograms.results import CountMatrix, Resampling
from meseta.recipe.histogram import HistogramSettings
from meseta.recipe.resampling import ResamplingSettings
from meseta.work import Work

__all__ = ["FEWEST_SPECIMENS", "block_traces_for", "replicate_counts", "resample", "restricted", "t_factor"]

Integers = npt.NDArray[np.int64]
Weights = npt.NDArray[np.uint16]

FEWEST_SPECIMENS = 5
_GUARD_TRACES = 160
_FEWEST_BLOCKS = 6
_USUAL_BLOCKS = 8
_CANDIDATES = 8
_MOST_DRAWS = 20_000_000
_EXACT_FLOAT32 = 1 << 24
_FEW_CHANGES = 8
"""Traces a change of weight from which on sums over the changes are the faster way."""
_MOST_CHANGES = 1 << 22
_RUNNING_CELLS = 1 << 20
_HELD_FIXED = "calibration, alignment, region, bins, selection and plateaus"


def resample(
    counts: CountMatrix,
    kept: npt.NDArray[np.bool_],
    trace_table: Mapping[str, npt.NDArray[Any]],
    _: HistogramSettings,
    settings: ResamplingSettings,
    work: Work,
) -> Resampling:
    """Draw replicate data sets from the kept traces, after what was replicated.

    Parameters
    ----------
    counts : CountMatrix
    kept : (traces,) bool
    trace_table : mapping of str to (traces,) array
        ``specimen`` and ``session`` name what was replicated.
    settings : ResamplingSettings
    work : Work

    Returns
    -------
    Resampling
        Replicate counts are exact integers.
    """
    rows = np.flatnonzero(kept & counts.used)
    random = np.random.default_rng(settings.seed)
    features = record_features(counts, rows)
    memory = memory_of(features)
    names = _names(trace_table, rows, "session" if settings.scheme == "sessions" else "specimen")
    plan = _plan(settings, names, memory, features)
    weights = plan.draw(settings.replicates, len(rows), random)
    work.check()
    effective = min(float(len(rows)), max(len(rows) / plan.inflation, min(len(rows), 1.0)))
    return Resampling(
        scheme=plan.scheme,
        rows=rows,
        weights=weights,
        block_traces=plan.block,
        effective_traces=effective,
        reason=plan.reason,
        counts=replicate_counts(counts, rows, weights, work),
        widen=plan.widen,
        degrees=plan.degrees,
        specimens=plan.groups,
        held_fixed=plan.held_fixed,
    )


def restricted(drawn: Resampling, counts: CountMatrix, chosen: npt.NDArray[np.bool_], work: Work) -> Resampling:
    """Return the same draws as some of the traces see them, so that parts of a recording can be compared.

    Parameters
    ----------
    drawn : Resampling
    counts : CountMatrix
        What it was drawn for.
    chosen : (traces,) bool
        Traces that were not drawn from are left out.
    work : Work
    """
    mine = chosen[drawn.rows]
    if mine.all():
        return drawn
    rows, weights = drawn.rows[mine], drawn.weights[:, mine]
    share = len(rows) / max(len(drawn.rows), 1)
    return replace(
        drawn,
        rows=rows,
        weights=weights,
        effective_traces=drawn.effective_traces * share,
        counts=replicate_counts(counts, rows, weights, work),
    )


# -- what to draw ----------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Plan:
    """What is drawn: strata of traces, each in blocks, or whole groups."""

    scheme: str
    labels: Integers
    groups: int
    block: int
    balanced: bool
    widen: float
    degrees: float
    inflation: float
    reason: str
    held_fixed: str

    def draw(self, replicates: int, traces: int, random: np.random.Generator) -> Weights:
        """Return how often each trace is drawn in each replicate."""
        if self.groups:
            drawn = random.multinomial(self.groups, np.full(self.groups, 1 / self.groups), size=replicates)
            return drawn.astype(np.uint16)[:, self.labels]
        weights = np.zeros((replicates, traces), np.uint16)
        for label in range(int(self.labels.max(initial=-1)) + 1):
            _draw_blocks(weights, np.flatnonzero(self.labels == label), self.block, self.balanced, random)
        return weights


def _names(table: Mapping[str, npt.NDArray[Any]], rows: Integers, level: str) -> npt.NDArray[np.str_]:
    """Return the specimen (or specimen and session) of each row."""
    specimen = np.asarray(table["specimen"])[rows].astype(np.str_)
    if level == "specimen":
        return specimen
    session = np.asarray(table["session"])[rows].astype(np.str_)
    return np.char.add(np.char.add(specimen, "\n"), session)


def _plan(
    settings: ResamplingSettings,
    names: npt.NDArray[np.str_],
    memory: Memory,
    features: npt.NDArray[np.float64],
) -> _Plan:
    traces = len(names)
    _, labels = np.unique(names, return_inverse=True)
    groups = int(labels.max(initial=-1)) + 1
    asked = settings.scheme
    whole = asked in ("specimens", "sessions")
    if groups >= 2 and (whole or (asked == "auto" and groups >= FEWEST_SPECIMENS)):
        return _group_plan(labels, groups, "sessions" if asked == "sessions" else "specimens", features)
    only = "; differences between specimens" + (f" (only {groups})" if groups > 1 else "")
    if asked == "traces" or traces < 20:
        widen = t_factor(max(traces - 1, 1)) * np.sqrt(traces / max(traces - 1, 1))
        return _Plan(
            "independent traces", np.zeros(traces, np.int64), 0, 1, False, widen, traces - 1, 1.0,
            "memory along the record was not looked at" if asked == "traces" else "too few to look for memory",
            f"{_HELD_FIXED}; the order of the traces{only}",
        )  # fmt: skip
    return _block_plan(settings, labels, groups, memory, only)


def _group_plan(labels: Integers, groups: int, word: str, features: npt.NDArray[np.float64]) -> _Plan:
    size = np.bincount(labels, minlength=groups).astype(np.float64)
    means = np.stack([np.bincount(labels, column, groups) / size for column in features.T], 1)
    between = groups * (((size / size.sum())[:, None] * means) ** 2).sum() / (groups - 1)
    inflation = max(1.0, float(between / max(features.var(0).sum() / len(labels), np.finfo(float).tiny)))
    # the 95 % quantile of a mean of few drawn groups lies nearer the middle than the normal one: 1.91 sigma for 5,
    # 1.94 for 10 (simulated)
    widen = t_factor(groups - 1) * np.sqrt(groups / (groups - 1)) / (1 - 0.13 / groups)
    reason = f"differences between {groups} {word}" if inflation > 1.5 else f"{groups} {word} agree"
    return _Plan(
        f"whole {word} ({groups})", labels.astype(np.int64), groups, 1, False, widen, groups - 1, inflation, reason,
        _HELD_FIXED,
    )  # fmt: skip


def _block_plan(settings: ResamplingSettings, labels: Integers, strata: int, memory: Memory, only: str) -> _Plan:
    traces = len(labels)
    shortest = int(np.bincount(labels).min()) if strata else traces
    block = settings.block_traces or block_traces_for(memory, traces)
    block = max(1, min(block, shortest // 2 if strata > 1 else traces // 2))
    blocks = traces / block
    draws = settings.replicates * max(blocks, 1)
    balanced = draws * _CANDIDATES <= _MOST_DRAWS
    lost = strata * (1 + balanced) / blocks
    missed = min(0.5, memory.lag_traces / block)
    degrees = max(1.0, 1.5 * (blocks - strata * (0.5 + balanced)))
    widen = t_factor(degrees) / np.sqrt(max(1 - lost, 0.1) * (1 - missed))
    words = f"moving blocks of {block} traces" if block > 1 else "blocks of one trace"
    if strata > 1:
        words += f" within {strata} specimens"
    if balanced:
        words += ", balanced in time"
    reason = (
        f"memory of about {max(1, round(memory.length_traces))} traces along the record"
        if memory.inflation > 1.2
        else "no memory along the record was found"
        if not memory.found
        else "little memory along the record"
    )
    fixed = f"{_HELD_FIXED}{only}" + ("; a steady drift along the record" if balanced else "")
    return _Plan(words, labels.astype(np.int64), 0, block, balanced, widen, degrees, memory.inflation, reason, fixed)


def block_traces_for(memory: Memory, traces: int) -> int:
    """Return the block length for a record.

    Three times the automatic length (an interval wants less bias than the least mean square error has), and never less
    than 160 traces or an eighth of the record: memory over some 20 traces that explains a few per cent of the scatter
    doubles the variance of a mean and shows in no single autocorrelation.  At most a sixth of the record.
    """
    wanted = max(3 * memory.block_traces, min(_GUARD_TRACES, traces / _USUAL_BLOCKS))
    return max(1, int(min(wanted, traces / _FEWEST_BLOCKS)))


def t_factor(degrees: float) -> float:
    """Return the ratio of the 97.5 % quantiles of Student's t and of the normal distribution."""
    from scipy import special

    return float(special.stdtrit(degrees, 0.975) / special.ndtri(0.975))


# -- drawing ---------------------------------------------------------------------------------------------------------


def _draw_blocks(weights: Weights, rows: Integers, block: int, balanced: bool, random: np.random.Generator) -> None:
    """Draw circular blocks of consecutive ``rows`` into ``weights``, as many traces as there are rows."""
    traces, replicates = len(rows), len(weights)
    number = -(-traces // block)
    lengths = np.full(number, block, np.int64)
    lengths[-1] = traces - block * (number - 1)
    tries = min(_CANDIDATES, max(1, _MOST_DRAWS // (replicates * number))) if balanced else 1
    starts = random.integers(0, traces, (replicates, tries, number))
    if tries > 1:
        starts = _in_balance(starts, lengths, traces)
    else:
        starts = starts[:, 0]
    resampling_kernels.draw_blocks(np.ascontiguousarray(starts), lengths, rows, weights)


def _in_balance(starts: Integers, lengths: Integers, traces: int) -> Integers:
    """Return of each replicate's tries the one whose mean time is nearest the record's, moved to it.

    All blocks that do not run over the end are moved by the same few traces.
    """
    around = np.concatenate([[0], np.cumsum(np.tile(np.arange(traces), 2))])
    wanted = traces * (traces - 1) // 2
    off = (around[starts + lengths] - around[starts]).sum(-1) - wanted
    best = np.abs(off).argmin(1)
    each = np.arange(len(starts))
    chosen, off = starts[each, best], off[each, best]
    movable = chosen + lengths <= traces
    shift = np.rint(off / np.maximum((movable * lengths).sum(1), 1)).astype(np.int64)
    return np.where(movable, np.clip(chosen - shift[:, None], 0, traces - lengths), chosen)


def replicate_counts(counts: CountMatrix, rows: Integers, weights: Weights, work: Work) -> npt.NDArray[np.float64]:
    """Return the histogram counts of every replicate, exact.

    Where whole blocks or specimens were drawn the weights seldom change along the traces: then the counts are sums,
    over the changes, of the change times the sum of all traces up to there (summation by parts), which takes a small
    part of a matrix product.
    """
    room = min(weights.size // _FEW_CHANGES, _MOST_CHANGES)
    places, jumps = np.empty(room, np.int64), np.empty(room, np.int64)
    begins = resampling_kernels.weight_jumps(np.ascontiguousarray(weights), places, jumps)
    if begins[-1] < 0:
        return _product(counts, rows, weights, work)
    total = np.zeros((len(weights), counts.shown.bins))
    step = max(1, min(counts.shown.bins, _RUNNING_CELLS // max(len(rows), 1)))
    for first in range(0, counts.shown.bins, step):
        work.check()
        running = np.empty((len(rows), min(step, counts.shown.bins - first)))
        resampling_kernels.running_rows(counts.counts, rows, counts.merge, first, running)
        resampling_kernels.add_jumps(begins, places, jumps, running, first, total)
    return total


def _product(counts: CountMatrix, rows: Integers, weights: Weights, work: Work) -> npt.NDArray[np.float64]:
    """Return the counts of replicates whose weights change from trace to trace.

    Works through the traces in blocks.  A block whose sums stay below 2**24 is multiplied in float32, where they are
    exact; any other in float64.
    """
    total = np.zeros((len(weights), counts.shown.bins))
    step = max(1, min(2048, len(rows)))
    for first in range(0, len(rows), step):
        work.check()
        chosen = rows[first : first + step]
        part = np.empty((len(chosen), counts.shown.bins), np.float32)
        counting_kernels.merge_rows(counts.counts, chosen, counts.merge, part)
        drawn = weights[:, first : first + step]
        most = float(part.max(initial=0)) * int(drawn.sum(1, dtype=np.int64).max(initial=0))
        kind = np.float32 if most < _EXACT_FLOAT32 else np.float64
        total += drawn.astype(kind) @ part.astype(kind, copy=False)
    return total

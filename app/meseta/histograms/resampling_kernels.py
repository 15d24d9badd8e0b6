"""Compiled kernels of the resampling: blocks drawn into weights, and replicate counts from where the weights change."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.histograms.counting_kernels import merged_bin
from meseta.kernels import kernel, warm_up

__all__ = ["add_jumps", "draw_blocks", "running_rows", "weight_jumps"]


@kernel
def draw_blocks(
    starts: npt.NDArray[np.int64],
    lengths: npt.NDArray[np.int64],
    rows: npt.NDArray[np.int64],
    weights: npt.NDArray[np.uint16],
) -> None:
    """Count how often each of ``rows`` lies in the blocks of a replicate; blocks run on from the end to the begin."""
    traces = len(rows)
    for replicate in range(len(starts)):
        for block in range(len(lengths)):
            at = starts[replicate, block]
            for _ in range(lengths[block]):
                weights[replicate, rows[at]] += 1
                at += 1
                if at == traces:
                    at = 0


@kernel
def weight_jumps(
    weights: npt.NDArray[np.uint16], places: npt.NDArray[np.int64], jumps: npt.NDArray[np.int64]
) -> npt.NDArray[np.int64]:
    """Fill in where along the traces a replicate's weight changes, and by how much; stop when there is no more room.

    Returns
    -------
    (replicates + 1,) int64
        Where each replicate's changes begin in ``places`` and ``jumps``; the last is -1 where the room was too small.
    """
    replicates, traces = weights.shape
    begins = np.zeros(replicates + 1, np.int64)
    found = 0
    for replicate in range(replicates):
        line = weights[replicate]
        for trace in range(traces):
            after = np.int64(line[trace + 1]) if trace + 1 < traces else np.int64(0)
            if np.int64(line[trace]) != after:
                if found == len(places):
                    begins[-1] = -1
                    return begins
                places[found], jumps[found] = trace, np.int64(line[trace]) - after
                found += 1
        begins[replicate + 1] = found
    return begins


@kernel
def running_rows(
    counts: npt.NDArray[np.unsignedinteger],
    rows: npt.NDArray[np.int64],
    merge: int,
    first: int,
    running: npt.NDArray[np.float64],
) -> None:
    """Fill ``running`` with sums over the rows up to each; ``merge`` fine bins to one, from bin ``first`` on."""
    for place in range(len(rows)):
        line = counts[rows[place]]
        for coarse in range(running.shape[1]):
            before = running[place - 1, coarse] if place > 0 else 0.0
            running[place, coarse] = before + merged_bin(line, first + coarse, merge)


@kernel
def add_jumps(
    begins: npt.NDArray[np.int64],
    places: npt.NDArray[np.int64],
    jumps: npt.NDArray[np.int64],
    running: npt.NDArray[np.float64],
    first: int,
    total: npt.NDArray[np.float64],
) -> None:
    """Add every change of weight times the running sum there, to the bins of ``total`` from ``first`` on."""
    for replicate in range(len(begins) - 1):
        line = total[replicate, first : first + running.shape[1]]
        for change in range(begins[replicate], begins[replicate + 1]):
            factor, sums = float(jumps[change]), running[places[change]]
            for at in range(len(line)):
                line[at] += factor * sums[at]


@warm_up
def _warm_up() -> None:
    place, weights = np.zeros(1, np.int64), np.ones((1, 2), np.uint16)
    draw_blocks(np.zeros((1, 1), np.int64), np.ones(1, np.int64), np.arange(2), weights)
    running, jumps = np.zeros((1, 1)), np.ones(1, np.int64)
    add_jumps(weight_jumps(weights, place.copy(), jumps), place, jumps, running, 0, np.zeros((1, 1)))
    for kind in (np.uint16, np.uint32):
        matrix = np.ones((2, 8), kind)
        for some in (matrix, matrix[:, :4]):  # a part of the axis is a view with gaps: another kernel
            running_rows(some, place, 4, 0, running)

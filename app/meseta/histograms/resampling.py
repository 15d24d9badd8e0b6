"""Resampling: which traces stand for how many independent ones, and data sets drawn accordingly."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import CountMatrix, Resampling
from meseta.recipe.resampling import ResamplingSettings
from meseta.work import Work

__all__ = ["resample"]


def resample(
    counts: CountMatrix,
    kept: npt.NDArray[np.bool_],
    trace_table: Mapping[str, npt.NDArray[Any]],
    histogram: object,
    settings: ResamplingSettings,
    work: Work,
) -> Resampling:
    """Draw replicate data sets from the kept traces."""
    rows = np.flatnonzero(kept & counts.used)
    number = len(rows)
    random = np.random.default_rng(settings.seed)
    weights = np.zeros((settings.replicates, number), np.uint16)
    for replicate in range(settings.replicates):
        if number:
            weights[replicate] = np.bincount(random.integers(0, number, number), minlength=number)
    values = counts.shown_counts(counts.counts[rows]).astype(np.float64)
    return Resampling("traces", rows, weights, 1, float(number), "", weights.astype(np.float64) @ values)

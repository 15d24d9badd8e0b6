"""Small recordings and noise models for the tests of the histograms."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from meseta.histograms import CountMatrix, count_traces, with_bins
from meseta.intake.alignment import Alignment
from meseta.recipe import Recipe
from meseta.segmentation.results import NoiseModel
from meseta.traces import ArraySamples, Channel, TraceSet


def noise_model(sigma_g0: float = 1e-6, **changes: float) -> NoiseModel:
    one = np.ones(1)
    model = NoiseModel(0.0, sigma_g0, 100, one, one * 0.01, one * 0.01, 2.0, 0.0, np.inf, -10.0)
    return replace(model, **changes)


def aligned_at(zero_nm: np.ndarray | float, zero_sample: np.ndarray | int, traces: int) -> Alignment:
    zero = np.broadcast_to(np.asarray(zero_nm, float), (traces,)).copy()
    sample = np.broadcast_to(np.asarray(zero_sample, np.int64), (traces,)).copy()
    return Alignment(zero, sample, np.where(np.isfinite(zero), 0, 1).astype(np.uint8), 0.5)


def log_uniform(traces: int, samples: int, seed: int) -> np.ndarray:
    """Values over ten decades, some negative, with every kind of special number among them."""
    random = np.random.default_rng(seed)
    values = (10 ** random.uniform(-9, 2, (traces, samples))).astype(np.float32)
    values[random.random((traces, samples)) < 0.1] *= -1
    special = [np.nan, -np.nan, np.inf, -np.inf, 0.0, -0.0, 1e-45, -1e-45, 3.4e38, 1.0, 10.0, 0.1]
    values[0, : len(special)] = special
    return values


def recording(values: np.ndarray, step_nm: float = 0.002, quality: np.ndarray | None = None, **columns) -> TraceSet:
    traces = TraceSet.from_arrays(list(values), step_nm=step_nm, **columns)
    return traces if quality is None else replace(traces, quality=ArraySamples(quality.ravel().astype(np.uint8)))


def explicit_drive(traces: TraceSet, relative: np.ndarray) -> TraceSet:
    return replace(traces, drive=replace(traces.drive, relative=ArraySamples(relative.ravel().astype(np.float32))))


def counted(
    traces: TraceSet, recipe: Recipe, noise: NoiseModel | None = None, zero: Alignment | None = None
) -> CountMatrix:
    noise = noise or noise_model()
    zero = zero or aligned_at(np.nan, -1, traces.traces)
    phases = ("push",) if recipe.histogram.direction == "closing" else ("pull",)
    return with_bins(count_traces(traces, recipe.histogram, noise, zero, phases), recipe.histogram, noise)


def matrix_of(counts: np.ndarray, grid, **columns) -> CountMatrix:
    from meseta.histograms import EXCLUDED

    traces = len(counts)
    return CountMatrix(
        grid,
        np.asarray(counts, np.uint16),
        np.zeros((traces, len(EXCLUDED)), np.int64),
        np.full(traces, 0.001),
        np.ones(traces, bool),
    )


__all__ = ["Channel", "aligned_at", "counted", "explicit_drive", "log_uniform", "matrix_of", "noise_model", "recording"]

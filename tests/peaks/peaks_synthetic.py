"""Recordings made of counts: every trace gives whole plateaus, so counts scatter far more than Poisson counts.

The truth is exact: a plateau's conductance is drawn from a normal population on the axis (decades or G0), its samples
scatter normally about it, so the expected histogram of a peak is a Gaussian at the population's mean.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meseta.histograms import EXCLUDED, ConductanceHistogram, CountMatrix, Grid, Resampling


@dataclass(frozen=True)
class Population:
    """Peaks on the axis: position, spread between traces, share of traces, mean samples a plateau."""

    axis: str
    low: float
    high: float
    bins: int
    position: tuple[float, ...]
    spread: tuple[float, ...]
    share: tuple[float, ...]
    samples: tuple[float, ...]
    noise: float
    background_samples: float
    background_decay: float

    @property
    def grid(self) -> Grid:
        u = np.linspace(self.low, self.high, self.bins + 1)
        return Grid(10**u if self.axis == "logarithmic" else u, self.axis)

    @property
    def position_g0(self) -> np.ndarray:
        u = np.array(self.position)
        return 10**u if self.axis == "logarithmic" else u


def logarithmic(peaks: int) -> Population:
    return Population(
        "logarithmic",
        -5.0,
        -1.0,
        200,
        (-3.0, -3.7, -2.2)[:peaks],
        (0.18, 0.15, 0.14)[:peaks],
        (0.6, 0.5, 0.5)[:peaks],
        (120, 100, 90)[:peaks],
        0.06,
        80,
        1.5,
    )


def linear(peaks: int) -> Population:
    return Population(
        "linear",
        0.4,
        4.4,
        200,
        (1.0, 1.93, 2.85)[:peaks],
        (0.10, 0.14, 0.18)[:peaks],
        (0.8, 0.7, 0.6)[:peaks],
        (120, 90, 70)[:peaks],
        0.03,
        60,
        1.0,
    )


@dataclass(frozen=True)
class Record:
    """How the record changes: memory (traces, share), drift on the axis, specimens and their spread on the axis."""

    memory_traces: float = 0.0
    memory_share: float = 0.5
    drift: float = 0.0
    specimens: int = 1
    specimen_spread: float = 0.0


def count_matrix(population: Population, traces: int, rng: np.random.Generator, record: Record | None = None):
    """Return a CountMatrix and the specimen of every trace."""
    record = record or Record()
    bins, edges = population.bins, np.linspace(population.low, population.high, population.bins + 1)
    place = np.arange(traces)
    specimen = place * record.specimens // traces
    shift = record.drift * (place / max(traces - 1, 1) - 0.5)
    if record.specimens > 1:
        shift = shift + record.specimen_spread * rng.standard_normal(record.specimens)[specimen]
    rows, values = [], []
    for position, spread, share, samples in zip(
        population.position, population.spread, population.share, population.samples, strict=True
    ):
        level = position + shift + spread * _remembered(traces, rng, record)
        number = rng.poisson(rng.gamma(3.0, samples / 3.0, traces)) * (rng.random(traces) < share)
        trace = np.repeat(place, number)
        rows.append(trace)
        values.append(level[trace] + population.noise * rng.standard_normal(len(trace)))
    number = rng.poisson(rng.gamma(4.0, population.background_samples / 4.0, traces))
    trace = np.repeat(place, number)
    rows.append(trace)
    values.append(population.low + _truncated(rng, len(trace), population))
    row, u = np.concatenate(rows), np.concatenate(values)
    bin_number = np.searchsorted(edges, u, side="right") - 1
    inside = (bin_number >= 0) & (bin_number < bins)
    counts = np.bincount(row[inside] * bins + bin_number[inside], minlength=traces * bins).reshape(traces, bins)
    matrix = CountMatrix(
        grid=population.grid,
        counts=counts.astype(np.uint16),
        excluded=np.zeros((traces, len(EXCLUDED)), np.int64),
        nm_a_sample=np.full(traces, np.nan),
        used=np.ones(traces, bool),
    )
    return matrix, specimen


def _remembered(traces: int, rng: np.random.Generator, record: Record) -> np.ndarray:
    fresh = rng.standard_normal(traces)
    if record.memory_traces <= 0:
        return fresh
    kept = np.exp(-1.0 / record.memory_traces)
    noise = rng.standard_normal(traces)
    memory = np.empty(traces)
    memory[0] = noise[0]
    for at in range(1, traces):
        memory[at] = kept * memory[at - 1] + np.sqrt(1 - kept**2) * noise[at]
    return np.sqrt(1 - record.memory_share) * fresh + np.sqrt(record.memory_share) * memory


def _truncated(rng: np.random.Generator, number: int, population: Population) -> np.ndarray:
    """Return distances from the lower end, exponential with ``background_decay`` e-folds over the range."""
    span, decay = population.high - population.low, population.background_decay
    return -np.log(1 - rng.random(number) * (1 - np.exp(-decay))) / decay * span


def histogram_of(matrix: CountMatrix, rows=None) -> ConductanceHistogram:
    """Return the histogram of all traces of a count matrix, in counts per trace and unit of the axis."""
    counts = matrix.counts if rows is None else matrix.counts[rows]
    total = counts.sum(axis=0, dtype=np.int64)
    scale = 1.0 / (len(counts) * matrix.grid.widths)
    blank = np.full(matrix.grid.bins, np.nan)
    return ConductanceHistogram(
        grid=matrix.grid,
        counts=total,
        traces=len(counts),
        traces_in_bin=(counts > 0).sum(axis=0),
        density=total * scale,
        density_low=blank,
        density_high=blank,
        density_unit="counts / trace / decade" if matrix.grid.axis == "logarithmic" else "counts / trace / G0",
        excluded={},
        scheme="",
        scale=scale,
    )


def bootstrap(matrix: CountMatrix, replicates: int, seed: int) -> Resampling:
    """Return independent draws of traces, made here so that the peaks are tested on their own."""
    rng, traces = np.random.default_rng(seed), len(matrix.counts)
    weights = rng.multinomial(traces, np.full(traces, 1.0 / traces), size=replicates)
    counts = weights.astype(float) @ matrix.counts.astype(float)
    rows = np.arange(traces)
    return Resampling("traces", rows, weights.astype(np.uint16), 1, float(traces), "", counts)


def counts_histogram(counts, edges, axis: str = "linear", traces: int = 2000) -> ConductanceHistogram:
    """Return a histogram of given counts, every bin reached by as many traces as it can."""
    grid = Grid(np.asarray(edges, float), axis)
    counts = np.asarray(counts, np.int64)
    scale = 1.0 / (traces * grid.widths)
    blank = np.full(grid.bins, np.nan)
    return ConductanceHistogram(
        grid,
        counts,
        traces,
        np.minimum(counts, traces),
        counts * scale,
        blank,
        blank,
        "counts / trace / decade" if axis == "logarithmic" else "counts / trace / G0",
        {},
        "",
        scale,
    )

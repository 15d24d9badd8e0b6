"""Recordings with a known expected histogram, for measuring how often intervals hold.

Made sample by sample and counted as any recording is (:func:`recorded`), or, faster, as counts (:func:`experiment`).
Every trace may have a plateau (latent choice), at a position that scatters from trace to trace; both may have memory
along the record; the position may drift and differ between specimens.  The expected histogram is known in closed form.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from scipy import signal, stats

from meseta.histograms import Grid, conductance_histogram, count_traces, resample, with_bins
from meseta.histograms.grids import logarithmic_edges
from meseta.histograms.results import EXCLUDED, CountMatrix, Resampling
from meseta.intake.alignment import Alignment
from meseta.recipe import Recipe
from meseta.segmentation.results import NoiseModel
from meseta.traces import TraceSet, trace_table
from meseta.work import Work

CENTRE = -3.5
SCATTER, WITHIN, SAMPLES_A_PLATEAU, SHARE, BACKGROUND = 0.10, 0.05, 60.0, 0.6, 0.5
GRID = Grid(logarithmic_edges(-100, -40, 20), "logarithmic")


@dataclass(frozen=True)
class Scenario:
    """What an experiment is like."""

    traces: int = 1000
    memory_traces: float = 0.0
    memory_share: float = 0.5
    drift_decades: float = 0.0
    specimens: int = 1
    between_decades: float = 0.0


SCENARIOS = {
    "independent": Scenario(),
    "memory of 20 traces": Scenario(traces=2000, memory_traces=20.0),
    "drift of 0.05 decade": Scenario(drift_decades=0.05),
    "5 specimens that differ by 0.05 decade": Scenario(specimens=5, between_decades=0.05),
}


def expected_counts(scenario: Scenario) -> np.ndarray:
    """Return the expected samples a trace in every bin, over the population (for drift: over this record)."""
    width = np.sqrt(SCATTER**2 + WITHIN**2 + scenario.between_decades**2)
    places = CENTRE + scenario.drift_decades * (np.arange(201) / 200 - 0.5)
    below = stats.norm.cdf(GRID.u_edges, places[:, None], width).mean(0)
    return SHARE * SAMPLES_A_PLATEAU * np.diff(below) + BACKGROUND


def latent(scenario: Scenario, random: np.random.Generator) -> np.ndarray:
    """Return standard normal numbers, one a trace, a share of whose variance has memory along the record."""
    fresh = random.standard_normal(scenario.traces)
    if not scenario.memory_traces:
        return fresh
    keep = np.exp(-1 / scenario.memory_traces)
    shocks = random.standard_normal(scenario.traces) * np.sqrt(1 - keep**2)
    start = [keep * random.standard_normal()]
    slow, _ = signal.lfilter([1.0], [1.0, -keep], shocks, zi=start)
    return np.sqrt(scenario.memory_share) * slow + np.sqrt(1 - scenario.memory_share) * fresh


def plateaus(scenario: Scenario, random: np.random.Generator) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return place (log10 G) and number of samples of every trace's plateau, and its specimen."""
    traces = scenario.traces
    specimen = np.arange(traces) * scenario.specimens // traces
    place = CENTRE + SCATTER * latent(scenario, random)
    place += scenario.drift_decades * ((np.arange(traces) + 0.5) / traces - 0.5)
    place += (scenario.between_decades * random.standard_normal(scenario.specimens))[specimen]
    has_plateau = latent(scenario, random) < stats.norm.ppf(SHARE)
    return place, random.poisson(SAMPLES_A_PLATEAU * random.gamma(2.0, 0.5, traces)) * has_plateau, specimen


def experiment(scenario: Scenario, seed: int) -> tuple[CountMatrix, dict[str, np.ndarray]]:
    """Return the count matrix and the trace table of one recording, made as counts."""
    random = np.random.default_rng(seed)
    traces = scenario.traces
    place, number, specimen = plateaus(scenario, random)
    u = np.repeat(place, number) + WITHIN * random.standard_normal(int(number.sum()))
    bins = GRID.bins
    at = np.searchsorted(GRID.u_edges, u, side="right") - 1
    inside = (at >= 0) & (at < bins)
    row = np.repeat(np.arange(traces), number)
    counts = np.bincount(row[inside] * bins + at[inside], minlength=traces * bins).reshape(traces, bins)
    counts = (counts + random.poisson(BACKGROUND, (traces, bins))).astype(np.uint16)
    matrix = CountMatrix(
        GRID, counts, np.zeros((traces, len(EXCLUDED)), np.int64), np.full(traces, 0.001), np.ones(traces, bool)
    )
    return matrix, trace_table(traces, specimen=specimen.astype(str))


FLOOR, SAMPLES_A_DECADE, SAMPLES = 1e-7, 10, 700
FINE = Recipe().with_values("histogram", bins_per_decade=20, low_g0=1e-5, high_g0=1e-2)


def recorded(scenario: Scenario, seed: int) -> tuple[CountMatrix, dict[str, np.ndarray]]:
    """Return the same recording from samples: a decay that passes every bin alike, the plateau, and the floor.

    The decay has 10 samples a decade and begins at a random phase, so that every bin of 1/20 decade expects half a
    sample of it, as in :func:`expected_counts`.
    """
    random = np.random.default_rng(seed)
    traces = scenario.traces
    place, number, specimen = plateaus(scenario, random)
    number = np.minimum(number, SAMPLES - 70)
    begin = 1.0 - random.random(traces) / SAMPLES_A_DECADE
    decay = begin[:, None] - np.arange(SAMPLES) / SAMPLES_A_DECADE
    before = np.clip(np.ceil((begin - place) * SAMPLES_A_DECADE), 0, SAMPLES).astype(np.int64)
    at = np.arange(SAMPLES) - before[:, None]
    on_plateau = (at >= 0) & (at < number[:, None])
    row = np.arange(traces)[:, None]
    u = decay[row, np.where(at < 0, np.arange(SAMPLES), np.maximum(np.arange(SAMPLES) - number[:, None], 0))]
    u = np.where(on_plateau, place[:, None] + WITHIN * random.standard_normal(u.shape), u)
    values = 10.0 ** np.maximum(u, -9) + FLOOR * random.standard_normal(u.shape)
    traces_set = TraceSet.from_arrays(values, step_nm=0.001, specimen=specimen.astype(str))
    noise = NoiseModel(0.0, FLOOR, 100, *(np.ones(1) for _ in range(3)), 2.0, 0.0, np.inf, -10.0)
    none = Alignment(np.full(traces, np.nan), np.full(traces, -1), np.ones(traces, np.uint8), 0.5)
    counts = count_traces(traces_set, FINE.histogram, noise, none, ("pull",))
    return with_bins(counts, FINE.histogram, noise), dict(traces_set.table)


def centroid(counts: np.ndarray) -> np.ndarray:
    """Return the mean log10 G within 0.5 decade of the centre, background taken off: a stand-in for a peak position."""
    u = (GRID.u_edges[1:] + GRID.u_edges[:-1]) / 2
    near = np.abs(u - CENTRE) < 0.5
    level = np.median(counts[..., ~near], axis=-1, keepdims=True)
    weight = counts[..., near] - level
    return (weight * u[near]).sum(-1) / weight.sum(-1)


Maker = Callable[[Scenario, int], tuple[CountMatrix, dict[str, np.ndarray]]]


@dataclass(frozen=True)
class Coverage:
    """How often intervals held the truth, in experiments."""

    band: float
    position: float
    position_width: float
    effective: float


def outcomes(
    scenario: Scenario, experiments: int, replicates: int, seed: int, make: Maker
) -> Iterator[tuple[np.ndarray, bool, float, Resampling]]:
    recipe = Recipe().with_values("resampling", replicates=replicates)
    truth = expected_counts(scenario)
    true_density = truth * 0.001 / GRID.widths
    true_place = float(centroid(truth))
    kept, work = np.ones(scenario.traces, bool), Work(threads=1)
    for number in range(experiments):
        matrix, table = make(scenario, seed + number)
        settings = replace_seed(recipe, number)
        drawn = resample(matrix, kept, table, recipe.histogram, settings.resampling, work)
        histogram = conductance_histogram(matrix, kept, recipe.histogram, drawn)
        strong = histogram.traces_in_bin >= histogram.weak_traces
        holds = (histogram.density_low <= true_density) & (true_density <= histogram.density_high)
        low, high = drawn.interval(centroid(histogram.counts.astype(float)), centroid(drawn.counts))
        yield holds[strong], bool(low <= true_place <= high), float(high - low), drawn


def replace_seed(recipe: Recipe, seed: int) -> Recipe:
    return recipe.with_values("resampling", seed=seed)


def measure(
    scenario: Scenario, experiments: int, replicates: int = 400, seed: int = 1000, make: Maker = experiment
) -> Coverage:
    """Return the coverage of the pointwise band (over bins that are not weak) and of the position."""
    bands, places, widths, worth = [], [], [], []
    for holds, place, width, drawn in outcomes(scenario, experiments, replicates, seed, make):
        bands.append(holds.mean())
        places.append(place)
        widths.append(width)
        worth.append(drawn.effective_traces)
    return Coverage(float(np.mean(bands)), float(np.mean(places)), float(np.mean(widths)), float(np.median(worth)))


def as_fresh(scenario: Scenario, traces: int) -> Scenario:
    return replace(scenario, traces=traces)

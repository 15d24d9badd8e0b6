"""Do 95 % intervals of peak positions hold the truth in 95 % of simulated experiments?

    python tests/campaigns/coverage_peaks.py [--experiments 2000] [--traces 1500] [--replicates 300] [--case NAME ...]

For every kind of record (independent traces, memory along the record, drift, five specimens) experiments with one, two
and three peaks on a linear and a logarithmic axis take turns.  Each is analysed by the engine's own resampling and fit.
Printed: coverage of all intervals with its binomial error, and the bias of the position in units of its statistical
sigma (standard deviation over the experiments).
"""

from __future__ import annotations

import argparse
import sys
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "peaks"))

from peaks_synthetic import Population, Record, count_matrix, histogram_of, linear, logarithmic

from meseta.histograms import resample
from meseta.peaks import fit_histogram
from meseta.recipe import Recipe
from meseta.traces import trace_table
from meseta.work import Work

CASES = {
    "independent": lambda unit: Record(),
    "memory": lambda unit: Record(memory_traces=20.0),
    "drift": lambda unit: Record(drift=0.05 * unit),
    "specimens": lambda unit: Record(specimens=5, specimen_spread=0.05 * unit),
}


def experiment(case: str, number: int, traces: int, replicates: int) -> list[tuple[str, float, float, float, float]]:
    """Return (scene, truth, position, low, high) of every peak of one simulated experiment, on the axis."""
    peaks, axis = 1 + number % 3, ("linear", "logarithmic")[number // 3 % 2]
    population: Population = (linear if axis == "linear" else logarithmic)(peaks)
    rng = np.random.default_rng([number, *case.encode()])
    # 0.05 decade about 1 G0 is 0.115 G0 on a linear axis
    record = CASES[case](1.0 if axis == "logarithmic" else np.log(10.0))
    matrix, specimen = count_matrix(population, traces, rng, record)
    recipe = Recipe().with_values("resampling", replicates=replicates, seed=number)
    recipe = recipe.with_values(
        "peaks",
        peaks=[
            {"position_g0": float(g), "width": float(w)}
            for g, w in zip(population.position_g0, np.hypot(population.spread, population.noise), strict=True)
        ],
        fit_low_g0=float(population.grid.edges_g0[0]),
        fit_high_g0=float(population.grid.edges_g0[-1]),
    )
    work = Work(threads=1)
    table = trace_table(traces, specimen=specimen.astype(str))
    kept = np.ones(traces, bool)
    drawn = resample(matrix, kept, table, recipe.histogram, recipe.resampling, work)
    fit = fit_histogram(histogram_of(matrix), recipe.peaks, drawn, matrix, None, work)
    found = fit.table
    place = [found.position_g0, found.position_low_g0, found.position_high_g0]
    position, low, high = (np.log10(value) if axis == "logarithmic" else value for value in place)
    truth = np.sort(population.position)
    return [
        (f"{axis} {peaks} peak {at + 1}", float(truth[at]), float(position[at]), float(low[at]), float(high[at]))
        for at in range(peaks)
    ]


def campaign(
    case: str, experiments: int, traces: int, replicates: int, processes: int, tell_every: int = 0
) -> dict[str, np.ndarray]:
    """Return the results of all experiments of one case: arrays (n, 4) of truth, position, low, high by scene.

    ``tell_every`` prints the verdict so far after so many experiments (never where it is 0), so that a campaign that is
    stopped has told what it found.
    """
    scenes: dict[str, list[tuple[float, ...]]] = {}

    def take(number: int, rows: list[tuple[str, float, float, float, float]]) -> None:
        for scene, *values in rows:
            scenes.setdefault(scene, []).append(tuple(values))
        if tell_every and (number + 1) % tell_every == 0 and number + 1 < experiments:
            coverage, intervals, _ = verdict({scene: np.array(values) for scene, values in scenes.items()})
            print(f"    {case}, {number + 1} experiments: {100 * coverage:.2f} % of {intervals}", flush=True)

    if processes == 1:
        for number in range(experiments):
            take(number, experiment(case, number, traces, replicates))
    else:
        with ProcessPoolExecutor(processes) as pool:
            jobs = [pool.submit(experiment, case, number, traces, replicates) for number in range(experiments)]
            for number, job in enumerate(jobs):
                take(number, job.result())
    return {scene: np.array(values) for scene, values in scenes.items()}


def verdict(results: dict[str, np.ndarray]) -> tuple[float, int, float]:
    """Return coverage over all intervals, their number, and the largest bias in units of the statistical sigma."""
    hits = [((v[:, 2] <= v[:, 0]) & (v[:, 0] <= v[:, 3])) for v in results.values()]
    bias = [abs((v[:, 1] - v[:, 0]).mean()) / v[:, 1].std(ddof=1) for v in results.values() if len(v) > 1]
    joined = np.concatenate(hits)
    return float(joined.mean()), len(joined), float(max(bias))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--experiments", type=int, default=2000)
    parser.add_argument("--traces", type=int, default=1500)
    parser.add_argument("--replicates", type=int, default=300)
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--case", nargs="*", default=list(CASES))
    given = parser.parse_args()
    for case in given.case:
        results = campaign(case, given.experiments, given.traces, given.replicates, given.processes, 100)
        coverage, intervals, bias = verdict(results)
        error = np.sqrt(0.95 * 0.05 / given.experiments)
        print(
            f"{case}: coverage {100 * coverage:.2f} % of {intervals} intervals in {given.experiments} experiments",
            end="",
        )
        print(f" (nominal 95, binomial error {100 * error:.2f}); largest bias {bias:.3f} sigma", flush=True)
        for scene, v in sorted(results.items()):
            inside = ((v[:, 2] <= v[:, 0]) & (v[:, 0] <= v[:, 3])).mean()
            sigma = v[:, 1].std(ddof=1)
            width = np.median(v[:, 3] - v[:, 2]) / (2 * 1.96)
            print(
                f"    {scene}: {100 * inside:.1f} %, bias {(v[:, 1] - v[:, 0]).mean() / sigma:+.3f} sigma, "
                f"sigma {sigma:.5f}, half interval / 1.96 {width:.5f}",
                flush=True,
            )


if __name__ == "__main__":
    main()

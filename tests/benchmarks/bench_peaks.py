"""1,000 warm-started refits of three peaks and a background over 400 bins: the compiled fit beside scipy's.

    python tests/benchmarks/bench_peaks.py

The same resampled histograms are refitted by ``scipy.optimize.least_squares`` on the signed deviance residuals (the
same minimum) with the same start; a sample of them, scaled up.  Best of several rounds in turns; the answers must
agree.
"""

from __future__ import annotations

import time

import numpy as np
from scipy import optimize, special

from meseta.peaks.fitting import fit_model, refit
from meseta.peaks.model import Model
from meseta.work import Work

BINS, REPLICATES, SAMPLE, ROUNDS = 400, 1000, 40, 5
EDGES = np.linspace(0.3, 4.3, BINS + 1)
TRUTH = np.array([3e4, 1.0, 0.1, 0, 2e4, 1.95, 0.18, 0, 1e4, 2.9, 0.25, 0, 1e4, 1.5])
FREE = np.array([0, 1, 2, 4, 5, 6, 8, 9, 10, 12, 13])


def model() -> Model:
    free = np.zeros(3, bool)
    return Model(
        "gaussian",
        "exponential",
        EDGES[:-1].copy(),
        EDGES[1:].copy(),
        False,
        TRUTH[1::4][:3],
        TRUTH[2::4][:3],
        np.full(3, 0.3),
        np.full(3, 4.3),
        np.full(3, 0.01),
        np.full(3, 4.0),
        free,
        free,
    )


def expected(values: np.ndarray) -> np.ndarray:
    """Return bin integrals by numpy and scipy alone."""
    total = np.zeros(BINS)
    for area, position, width in values[:9].reshape(3, 3):
        total += area * np.diff(special.ndtr((EDGES - position) / width))
    t = (EDGES - EDGES[0]) / (EDGES[-1] - EDGES[0])
    span = EDGES[-1] - EDGES[0]
    return total - values[9] * span / values[10] * np.diff(np.exp(-values[10] * (t - 0.5)))


def scipy_fit(counts: np.ndarray, start: np.ndarray) -> np.ndarray:
    def residuals(values: np.ndarray) -> np.ndarray:
        mu = np.maximum(expected(values), 1e-9)
        deviance = 2 * (mu - counts + special.xlogy(counts, counts / mu))
        return np.sign(counts - mu) * np.sqrt(np.maximum(deviance, 0.0))

    return optimize.least_squares(residuals, start, method="lm", x_scale=np.abs(start), ftol=1e-9).x


def main() -> None:
    chosen = model()
    random = np.random.default_rng(1)
    counts = random.poisson(chosen.curves(TRUTH).total).astype(float)
    many = random.poisson(chosen.curves(TRUTH).total, (REPLICATES, BINS)).astype(float)
    fitted = fit_model(chosen, counts)
    start = fitted.inner[FREE]
    refit(fitted, many[:4], Work(threads=1))
    own, both, peer = [], [], []
    for _ in range(ROUNDS):
        begin = time.perf_counter()
        single = refit(fitted, many, Work(threads=1))
        own.append(time.perf_counter() - begin)
        begin = time.perf_counter()
        found = refit(fitted, many, Work())
        both.append(time.perf_counter() - begin)
        begin = time.perf_counter()
        others = np.array([scipy_fit(row, start) for row in many[:SAMPLE]])
        peer.append((time.perf_counter() - begin) * REPLICATES / SAMPLE)
    np.testing.assert_array_equal(single.peaks, found.peaks)
    sigma = found.peaks[:, :, 1].std(axis=0)
    assert found.good.all()
    assert (np.abs(found.peaks[:SAMPLE, :, 1] - others[:, [1, 4, 7]]) < 0.02 * sigma).all()
    print(f"{REPLICATES} refits, 3 peaks and a background, {BINS} bins")
    print(f"  compiled, all threads   {min(both):7.3f} s   (to reach: 0.5 s)")
    print(f"  compiled, one thread    {min(own):7.3f} s")
    print(f"  scipy.least_squares     {min(peer):7.3f} s   ratio {min(peer) / min(own):.1f} a core")


if __name__ == "__main__":
    main()

"""Change points and plateaus against ruptures' KernelCPD, on one core, in one run; the costs are asserted.

python tests/benchmarks/bench_segmentation.py [--traces 10000] [--compare 40]
"""

from __future__ import annotations

import argparse
import time

import numpy as np
import ruptures

from meseta.analysis import Analysis
from meseta.segmentation import optimal_partition, partition_cost
from meseta.segmentation.scale import scale_of
from meseta.segmentation.stretch_kernels import stabilise
from meseta.simulate import standard_workload
from meseta.work import Work


def _steps(traces: int, every: int, samples: int = 5000) -> list[np.ndarray]:
    rng = np.random.default_rng(1)
    return [
        np.repeat(rng.standard_normal(samples // every) * 8, every) + rng.standard_normal(samples)
        for _ in range(traces)
    ]


def _compare(name: str, signals: list[np.ndarray], target: float) -> None:
    """Time both on the same signals, interleaved, best of five each, by the time of the process; print the ratio."""
    ours, theirs, worst = np.full(len(signals), np.inf), np.full(len(signals), np.inf), 0.0
    optimal_partition(signals[0], 20.0)
    for _ in range(5):
        for k, y in enumerate(signals):
            penalty = 3 * np.log(len(y))
            begin = time.process_time()
            mine = optimal_partition(y, penalty)
            middle = time.process_time()
            peer = ruptures.KernelCPD(kernel="linear", jump=1, min_size=1).fit(y[:, None]).predict(pen=penalty)
            end = time.process_time()
            ours[k], theirs[k] = min(ours[k], middle - begin), min(theirs[k], end - middle)
            cost, peer_cost = partition_cost(y, mine, penalty), partition_cost(y, peer, penalty)
            worst = max(worst, (cost - peer_cost) / max(abs(peer_cost), 1.0))
    assert worst <= 1e-9, f"cost above ruptures by {worst}"
    samples = sum(len(y) for y in signals)
    ratio = theirs.sum() / ours.sum()
    print(f"{name:24} {ours.sum() / samples * 1e9:8.0f} ns a sample   {ratio:6.1f} x KernelCPD   (to reach {target:g})")


def main() -> None:
    parser = argparse.ArgumentParser(description="Time change points and plateaus.")
    parser.add_argument("--traces", type=int, default=10_000)
    parser.add_argument("--compare", type=int, default=40)
    chosen = parser.parse_args()
    _compare("steps of 500 samples", _steps(chosen.compare, 500), 15)
    _compare("steps of 100 samples", _steps(chosen.compare, 100), 15)
    few = standard_workload(chosen.compare, 5000, seed=1)
    noise = Analysis(few).noise()
    scale, mix = scale_of(noise), []
    for trace in range(few.traces):
        y = np.empty(5000)
        stabilise(few.trace_conductance(trace).astype(float), scale, y)
        mix.append(y)
    _compare("mix, floor included", mix, 5)
    traces = standard_workload(chosen.traces, 5000, seed=0)
    work = Work(threads=2)
    analysis = Analysis(traces)
    for name in ("noise", "alignment", "plateaus", "measures"):
        begin = time.perf_counter()
        analysis.result(name, work)
        print(f"{name:24} {time.perf_counter() - begin:8.2f} s for {traces.samples / 1e6:g} million samples")
    ramp = np.linspace(0, 1e4, 200_000)
    begin = time.perf_counter()
    optimal_partition(ramp, 3 * np.log(len(ramp)))
    print(f"{'noiseless ramp':24} {(time.perf_counter() - begin) / len(ramp) * 1e9:8.0f} ns a sample (the bad case)")


if __name__ == "__main__":
    main()

"""How long simulating takes: 10,000 traces of 5,000 samples, against drawing as many normal numbers with numpy.

python tests/benchmarks/bench_simulate.py [--traces 10000] [--samples 5000]
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable

import numpy as np

from meseta.simulate import SimulationSettings, simulate, simulate_raw, standard_workload


def best(function: Callable[[], object], repeats: int = 2) -> tuple[float, object]:
    """Return the best time in seconds and the last answer."""
    times, answer = [], None
    for _ in range(repeats):
        begin = time.perf_counter()
        answer = function()
        times.append(time.perf_counter() - begin)
    return min(times), answer


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--traces", type=int, default=10_000)
    parser.add_argument("--samples", type=int, default=5_000)
    chosen = parser.parse_args()
    settings = SimulationSettings(samples=chosen.samples)
    simulate("molecule", 64, 1, settings)  # compiles
    simulate_raw("molecule", 8, 1, settings)
    total = chosen.traces * chosen.samples
    rng = np.random.default_rng(1)
    numpy_time, _ = best(lambda: [rng.standard_normal(chosen.samples, np.float32) for _ in range(chosen.traces)])
    print(f"numpy normals, {total} samples, one thread: {numpy_time:.2f} s")
    work = {
        "simulate molecule": lambda: simulate("molecule", chosen.traces, 1, settings),
        "simulate metal, hard": lambda: simulate("metal", chosen.traces, 1, settings.with_values(noise="hard")),
        "standard workload": lambda: standard_workload(chosen.traces, chosen.samples, 1),
        "simulate raw, a fifth": lambda: simulate_raw("molecule", chosen.traces // 5, 1, settings),
    }
    for name, function in work.items():
        seconds, answer = best(function, 1)
        print(f"{name}: {seconds:.2f} s, {seconds / numpy_time:.1f} x numpy's normals")
        if name == "simulate molecule":
            made = answer.traces.conductance.reshape(chosen.traces, chosen.samples)
            floor = made[answer.labels == "none", -chosen.samples // 5 :]
            assert abs(floor.std() / settings.levels.floor_sigma_g0 - 1) < 0.1
        if name == "standard workload":
            assert abs((answer.conductance < 4.5e-6).mean() - 0.6) < 0.03


if __name__ == "__main__":
    main()

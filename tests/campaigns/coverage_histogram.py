"""Coverage of the histogram's intervals in simulated experiments.

Run with ``python tests/campaigns/coverage_histogram.py [experiments] [samples|counts]``: recordings made sample by
sample and counted as any recording is, or made as counts.
"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1] / "histograms"))

from coverage_experiments import SCENARIOS, experiment, measure, recorded


def main(experiments: int, level: str) -> None:
    for name, scenario in SCENARIOS.items():
        found = measure(scenario, experiments, make=recorded if level == "samples" else experiment)
        print(
            f"{name} ({scenario.traces} traces, {experiments} experiments, {level}): band {100 * found.band:.1f} %, "
            f"position {100 * found.position:.1f} %, mean width {found.position_width:.4f} decades, "
            f"worth {found.effective:.0f} traces",
            flush=True,
        )


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 2000, sys.argv[2] if len(sys.argv) > 2 else "samples")

"""How often intervals of the molecular yield hold the planted share, in simulated recordings analysed from the samples.

Run with ``python tests/campaigns/coverage_yield.py [experiments] [traces]``.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "histograms"))

from yield_experiments import SHARES, efficiency, experiment

from meseta.work import Work


def main(experiments: int, traces: int) -> None:
    work = Work()
    for share in SHARES:
        held, limits, shares, widths, false = [], [], [], [], []
        for number in range(experiments):
            seed = int(1000 * share) * 1000 + number
            # the efficiency is measured anew for every experiment: its error is in the interval
            found = experiment(share, traces, seed, efficiency(2 * traces, 900_000 + seed, work), work)
            held.append(found.share_low <= share <= found.share_high)
            limits.append(share <= found.upper_limit)
            shares.append(found.share)
            widths.append(found.share_high - found.share_low)
            false.append(found.false_discovery)
        print(
            f"planted {100 * share:.0f} % ({experiments} recordings of {traces} traces): "
            f"held {100 * np.mean(held):.1f} %, "
            f"upper limits held {100 * np.mean(limits):.1f} %, mean {100 * np.mean(shares):.2f} %, "
            f"width {100 * np.mean(widths):.1f} %, false discoveries {100 * np.nanmean(false):.0f} %",
            flush=True,
        )


if __name__ == "__main__":
    main(
        int(sys.argv[1]) if len(sys.argv) > 1 else 100,
        int(sys.argv[2]) if len(sys.argv) > 2 else 300,
    )

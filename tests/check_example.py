"""Check a result of the bundled night recording against its truth.

Usage: python tests/check_example.py RESULT_FOLDER

The population peaks of the simulation must lie inside the printed 95 % intervals, and the files must all be there.
"""

from __future__ import annotations

import csv
import json
import sys
from pathlib import Path

TRUTH = Path(__file__).parents[1] / "sample_traces" / "truth" / "night_raw.truth.json"
FILES = [
    "summary.json",
    "traces.csv",
    "plateaus.csv",
    "histogram.csv",
    "peaks.csv",
    "lengths.csv",
    "histogram2d.npz",
    "correlation2d.npz",
    "recipe.toml",
    "study.h5",
    "figure.pdf",
    "figure.svg",
    "figure.png",
    "report.html",
]


def check(folder: Path) -> list[str]:
    """Return what is wrong with a result folder; empty where all is right."""
    wrong = [f"{name} is missing" for name in FILES if not (folder / name).is_file()]
    if wrong:
        return wrong
    truth = {peak["name"]: peak for peak in json.loads(TRUTH.read_text(encoding="utf-8"))["peaks"]}
    with (folder / "peaks.csv").open(newline="", encoding="utf-8") as file:
        peaks = list(csv.DictReader(file))
    for row, name in ((0, "molecule"), (1, "1 atom")):
        low, high = (float(peaks[row][column]) for column in ("position_low_g0", "position_high_g0"))
        true = truth[name][f"position_{peaks[row]['axis']}_axis_g0"]
        if not low <= true <= high:
            wrong.append(f"the {name} peak is at {true:.4g} G0, outside the interval {low:.4g} to {high:.4g} G0")
    with (folder / "traces.csv").open(newline="", encoding="utf-8") as file:
        opened = [row for row in csv.DictReader(file) if row["direction"] == "opening"]
    expected = json.loads(TRUTH.read_text(encoding="utf-8"))["traces"]
    if len(opened) != expected:
        wrong.append(f"{len(opened)} openings were cut, the recording has {expected}")
    return wrong


if __name__ == "__main__":
    faults = check(Path(sys.argv[1]))
    for fault in faults:
        print(f"wrong: {fault}")
    if not faults:
        print("the bundled recording gives what its truth says")
    sys.exit(bool(faults))

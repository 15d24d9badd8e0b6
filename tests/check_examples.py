"""Check every bundled recording with the installed command: it is understood, analysed, and says what its truth says.

Usage: python tests/check_examples.py
"""

from __future__ import annotations

import csv
import json
import subprocess
import sys
import tempfile
from pathlib import Path

BUNDLED = Path(__file__).parents[1] / "sample_traces"


def meseta(*arguments: object) -> dict:
    """Run a command and return its machine-readable answer."""
    command = [sys.executable, "-m", "meseta", *map(str, arguments), "--json"]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    if done.returncode:
        sys.exit(f"{' '.join(command)} ended with {done.returncode}: {done.stderr}")
    return json.loads(done.stdout.splitlines()[-1])


def truth(name: str) -> dict:
    """Return the parameters of a bundled simulation."""
    return json.loads((BUNDLED / "truth" / f"{name}.truth.json").read_text(encoding="utf-8"))


def check(folder: Path) -> list[str]:
    """Return what is wrong; empty where all is right."""
    wrong = []
    for name, openings in (("night_raw.h5", 520), ("evening_blank_raw.h5", 150)):
        described = meseta("peek", BUNDLED / name)["files"][0]
        if described["openings"] != openings:
            wrong.append(f"peek sees {described['openings']} openings in {name}, not {openings}")
    meseta("run", BUNDLED / "evening_blank_raw.h5", "--out", folder / "blank")
    wrong += [f"the blank shows a peak at {peak} G0" for peak in _peaks(folder / "blank") if peak < 0.1]
    meseta("run", BUNDLED / "bench_check", "--out", folder / "bench", "--preset", "metal")
    first = min(_peaks(folder / "bench"), default=float("nan"))
    atom = next(peak["position_g0"] for peak in truth("bench_check")["peaks"] if peak["name"] == "1 atom")
    if not abs(first - atom) < 0.05:
        wrong.append(f"the first peak of bench_check lies at {first:.3f} G0, its truth is {atom:.3f} G0")
    again = meseta("run", folder / "blank" / "study.h5", "--out", folder / "again")
    if again["traces"] != json.loads((folder / "blank" / "summary.json").read_text(encoding="utf-8"))["traces"]:
        wrong.append("the study of the blank gives other traces than the recording")
    for table in ("traces.csv", "plateaus.csv", "histogram.csv", "peaks.csv"):
        if (folder / "blank" / table).read_bytes() != (folder / "again" / table).read_bytes():
            wrong.append(f"the study of the blank gives another {table}")
    return wrong


def _peaks(folder: Path) -> list[float]:
    with (folder / "peaks.csv").open(newline="", encoding="utf-8") as file:
        return [float(row["position_g0"]) for row in csv.DictReader(file) if row["position_g0"]]


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as scratch:
        faults = check(Path(scratch))
    for fault in faults:
        print(f"wrong: {fault}")
    if not faults:
        print("every bundled recording gives what its truth says")
    sys.exit(bool(faults))

"""How well plateaus are found, against a known truth.  Run as a script to print the table.

A found plateau is right if it overlaps one true plateau of at least ten samples by at least half of their union and its
conductance lies within 0.1 decade; the matching is one to one, best overlap first.  A found plateau that matches a
shorter true one is neither right nor wrong.

    python tests/evaluation/score.py                       # seeds for development
    python tests/evaluation/score.py --seeds 101 102 103   # seeds for the final judgement, never for tuning
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass

import numpy as np
from independent import KINDS, LEVELS, LOW, STEP_NM, Recording, Truth, recording

SHORTEST = 10


@dataclass(frozen=True)
class Found:
    """Found plateaus: (n,) arrays."""

    trace: np.ndarray
    start: np.ndarray
    stop: np.ndarray
    level_g0: np.ndarray


@dataclass(frozen=True)
class Score:
    """Figures of one recording; a rate without cases is NaN."""

    true: int
    found: int
    right: int
    precision: float
    recall: float
    f1: float
    true_molecules: int
    molecule_recall: float
    false_a_trace: float
    boundary_median: float
    bias_high: float
    bias_low: float
    bias_low_error: float


def matches(truth: Truth, found: Found) -> list[tuple[int, int]]:
    """Return (true row, found row) of every right plateau, also of those shorter than ten samples."""
    pairs = []
    for trace in np.unique(found.trace):
        for t in np.flatnonzero(truth.trace == trace):
            for f in np.flatnonzero(found.trace == trace):
                common = min(truth.stop[t], found.stop[f]) - max(truth.start[t], found.start[f])
                union = max(truth.stop[t], found.stop[f]) - min(truth.start[t], found.start[f])
                if common <= 0 or common < 0.5 * union or not found.level_g0[f] > 0:
                    continue
                if abs(np.log10(found.level_g0[f] / truth.level_g0[t])) <= 0.1:
                    pairs.append((common / union, t, f))
    pairs.sort(key=lambda pair: (-pair[0], pair[1], pair[2]))
    used_true, used_found, chosen = set(), set(), []
    for _, t, f in pairs:
        if t not in used_true and f not in used_found:
            used_true.add(t)
            used_found.add(f)
            chosen.append((int(t), int(f)))
    return chosen


def score(truth: Truth, found: Found, traces: int, floor_sigma_g0: float) -> Score:
    """Return the figures of one recording."""
    chosen = matches(truth, found)
    counted = truth.stop - truth.start >= SHORTEST
    right = [(t, f) for t, f in chosen if counted[t]]
    judged = len(found.trace) - (len(chosen) - len(right))
    true_rows = np.array([t for t, _ in right], int)
    found_rows = np.array([f for _, f in right], int)
    precision, recall = _share(len(right), judged), _share(len(right), int(counted.sum()))
    molecules = counted & truth.molecule
    edges = np.concatenate(
        [truth.start[true_rows] - found.start[found_rows], truth.stop[true_rows] - found.stop[found_rows]]
    )
    deviation = np.log10(found.level_g0[found_rows] / truth.level_g0[true_rows])
    above = truth.level_g0[true_rows] / floor_sigma_g0
    low = (above > 3) & (above <= 10)
    return Score(
        true=int(counted.sum()),
        found=judged,
        right=len(right),
        precision=precision,
        recall=recall,
        f1=2 * precision * recall / (precision + recall) if precision + recall > 0 else np.nan,
        true_molecules=int(molecules.sum()),
        molecule_recall=_share(int(truth.molecule[true_rows].sum()), int(molecules.sum())),
        false_a_trace=(judged - len(right)) / traces,
        boundary_median=float(np.median(np.abs(edges))) if len(edges) else np.nan,
        bias_high=_mean(deviation[above > 10]),
        bias_low=_mean(deviation[low]),
        bias_low_error=float(np.std(deviation[low], ddof=1) / np.sqrt(low.sum())) if low.sum() > 1 else np.nan,
    )


def _share(part: int, whole: int) -> float:
    return part / whole if whole else np.nan


def _mean(values: np.ndarray) -> float:
    return float(np.mean(values)) if len(values) else np.nan


def pooled(parts: list[tuple[Truth, Found, int]], floor_sigma_g0: float) -> Score:
    """Return the figures of several recordings taken together."""
    shift, truths, founds = 0, [], []
    for truth, found, traces in parts:
        truths.append(Truth(truth.trace + shift, truth.start, truth.stop, truth.level_g0, truth.molecule))
        founds.append(Found(found.trace + shift, found.start, found.stop, found.level_g0))
        shift += traces
    joined_truth = Truth(*(np.concatenate([getattr(one, name) for one in truths]) for name in vars(truths[0])))
    joined_found = Found(*(np.concatenate([getattr(one, name) for one in founds]) for name in vars(founds[0])))
    return score(joined_truth, joined_found, shift, floor_sigma_g0)


def found_by_meseta(made: Recording, method: str) -> Found:
    """Return what ``meseta.find_plateaus`` finds, with nothing told of the recording but the displacement a sample."""
    import meseta
    from meseta.recipe import Recipe

    traces = meseta.TraceSet.from_arrays(made.conductance, step_nm=STEP_NM)
    table = meseta.find_plateaus(traces, Recipe().with_settings([f"plateaus.method={method}"]))
    return Found(table.trace, table.start, table.stop, table.level_g0)


HEADER = (
    f"{'kind':12}{'noise':7}{'seed':>5}{'true':>6}{'found':>6}{'P':>7}{'R':>7}{'F1':>7}"
    f"{'mol':>5}{'molR':>7}{'false/tr':>9}{'edge':>6}{'bias>10s':>9}{'bias3-10':>9}{'+-':>8}"
)


def line(kind: str, level: str, seed: str, figures: Score) -> str:
    """Return one printed row."""
    return (
        f"{kind:12}{level:7}{seed:>5}{figures.true:6}{figures.found:6}{figures.precision:7.3f}{figures.recall:7.3f}"
        f"{figures.f1:7.3f}{figures.true_molecules:5}{figures.molecule_recall:7.3f}{figures.false_a_trace:9.3f}"
        f"{figures.boundary_median:6.1f}{figures.bias_high:9.4f}{figures.bias_low:9.4f}{figures.bias_low_error:8.4f}"
    )


def main() -> None:
    parser = argparse.ArgumentParser(description="Print how well plateaus are found.")
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2])
    parser.add_argument("--traces", type=int, default=300)
    parser.add_argument("--kinds", nargs="+", default=list(KINDS), choices=[*KINDS, LOW])
    parser.add_argument("--levels", nargs="+", default=list(LEVELS), choices=LEVELS)
    parser.add_argument("--method", default="change_points")
    parser.add_argument("--each", action="store_true", help="print every seed, not only all seeds together")
    chosen = parser.parse_args()
    print(HEADER)
    for level in chosen.levels:
        everything = []
        for kind in chosen.kinds:
            parts = []
            for seed in chosen.seeds:
                made = recording(kind, level, chosen.traces, seed)
                parts.append((made.truth, found_by_meseta(made, chosen.method), chosen.traces))
                if chosen.each:
                    print(line(kind, level, str(seed), pooled(parts[-1:], made.floor_sigma_g0)))
            print(line(kind, level, "all", pooled(parts, made.floor_sigma_g0)), flush=True)
            everything += parts
        print(line("all kinds", level, "all", pooled(everything, made.floor_sigma_g0)), flush=True)


if __name__ == "__main__":
    main()

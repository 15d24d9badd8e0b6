"""The scorer counts what was counted by hand; the independent simulator is deterministic and means what it says."""

from __future__ import annotations

import numpy as np
import pytest
from independent import KINDS, NOISES, STEP_NM, recording
from score import Found, Truth, matches, score


def truth_of(*rows: tuple[int, int, int, float, bool]) -> Truth:
    columns = list(zip(*rows, strict=True))
    return Truth(*(np.array(column) for column in columns))


def found_of(*rows: tuple[int, int, int, float]) -> Found:
    columns = list(zip(*rows, strict=True))
    return Found(*(np.array(column) for column in columns))


TRUTH = truth_of(
    (0, 0, 100, 2.0, False), (0, 100, 200, 1.0, False), (0, 200, 300, 2e-4, True), (1, 0, 6, 3.0, False),
    (1, 6, 80, 1.0, False),
)  # fmt: skip


def test_counts_of_a_case_done_by_hand() -> None:
    found = found_of(
        (0, 2, 98, 2.02),  # right, edges 2 and 2
        (0, 100, 149, 1.0),  # 49 of 100: too short
        (0, 200, 310, 2e-4 * 10**0.09),  # right, edges 0 and 10
        (1, 0, 6, 3.0),  # a true plateau too short to count: neither right nor wrong
        (1, 6, 80, 1.3),  # 0.114 decades off: wrong
    )
    figures = score(TRUTH, found, 2, 3e-6)
    assert (figures.true, figures.found, figures.right) == (4, 4, 2)
    assert figures.precision == figures.recall == figures.f1 == 0.5
    assert figures.molecule_recall == 1.0
    assert figures.false_a_trace == 1.0
    assert figures.boundary_median == np.median([2, 2, 0, 10])
    assert figures.bias_high == pytest.approx((np.log10(1.01) + 0.09) / 2)


def test_half_of_the_union_is_enough_and_a_true_plateau_is_taken_once() -> None:
    found = found_of((0, 100, 150, 1.0), (0, 150, 200, 1.0))
    assert matches(TRUTH, found) == [(1, 0)]


def test_no_plateaus_at_all_are_not_a_number_but_false_ones_count() -> None:
    nothing = Truth(*(np.empty(0, int) for _ in range(5)))
    figures = score(nothing, found_of((3, 0, 50, 1e-3)), 10, 1e-6)
    assert np.isnan(figures.recall)
    assert figures.false_a_trace == 0.1


@pytest.mark.parametrize("kind", KINDS)
def test_the_independent_simulator_repeats_itself(kind: str) -> None:
    one, other = recording(kind, "hard", 6, 3), recording(kind, "hard", 6, 3)
    assert all(np.array_equal(a, b, equal_nan=True) for a, b in zip(one.conductance, other.conductance, strict=True))
    assert not np.array_equal(one.conductance[0], recording(kind, "hard", 6, 4).conductance[0], equal_nan=True)


def test_its_plateaus_are_where_the_truth_says() -> None:
    made = recording("molecule50", "clean", 60, 5)
    for row in range(len(made.truth.trace)):
        inside = made.conductance[made.truth.trace[row]][made.truth.start[row] : made.truth.stop[row]]
        if len(inside) >= 10:
            assert abs(np.log10(np.median(inside) / made.truth.level_g0[row])) < 0.06
    share = len(np.unique(made.truth.trace[made.truth.molecule])) / 60
    assert abs(share - 0.5) < 3 * np.sqrt(0.25 / 60)


def test_hard_traces_have_the_faults_they_are_hard_for() -> None:
    made = recording("staircase", "hard", 100, 5)
    joined = np.concatenate(made.conductance)
    assert 0.0005 < np.isnan(joined).mean() < 0.01
    ceiling = NOISES["hard"].saturation_g0 / (1 - NOISES["hard"].series_ohm / 12906.4037 * NOISES["hard"].saturation_g0)
    assert np.nanmax(joined) <= ceiling * 1.001
    floor = np.concatenate([trace[-400:] for trace in made.conductance])
    assert np.nanmedian(floor) == pytest.approx(NOISES["hard"].offset_g0, abs=5e-7)
    assert made.step_nm == STEP_NM

"""Optimal change points against an O(n²) dynamic programme, a reference library and the worked example."""

import numpy as np
import pytest
import ruptures
from hypothesis import given
from hypothesis import strategies as st

from meseta.errors import CallError
from meseta.segmentation import optimal_partition, partition_cost
from meseta.segmentation.kernels import partition_lines

# Worked example: tests/reference/README.md, segmentation; segment ends and objective by brute force.
EXAMPLE = np.array([0.02, -0.01, 0.03, 0, 1.01, 0.98, 1.02, 1, 1.03, 0.49, 0.52, 0.5])


def dynamic_programme(y, penalty, weights, minimum):
    """The plain recursion F(t) = min over s of F(s) + C(s, t) + penalty (Killick et al. 2012)."""
    n = len(y)
    best = np.full(n + 1, np.inf)
    best[0] = -penalty
    w, a, b = (np.concatenate([[0], np.cumsum(part)]) for part in (weights, weights * y, weights * y * y))
    for t in range(minimum, n + 1):
        for s in range(t - minimum + 1):
            weight = w[t] - w[s]
            cost = b[t] - b[s] - ((a[t] - a[s]) ** 2 / weight if weight > 0 else 0)
            best[t] = min(best[t], best[s] + cost + penalty)
    return best[n]


@pytest.mark.parametrize(
    ("penalty", "ends"), [(2 * 0.02**2 * np.log(12), [4, 9, 12]), (0.5, [4, 12]), (2.0, [12])], ids=["bic", "0.5", "2"]
)
def test_worked_example(penalty, ends):
    assert optimal_partition(EXAMPLE, penalty).tolist() == ends


def test_worked_example_objective():
    penalty = 2 * 0.02**2 * np.log(12)
    assert partition_cost(EXAMPLE, [4, 9, 12], penalty) == pytest.approx(0.006922517306, rel=1e-9)


@given(
    st.integers(0, 2**32 - 1),
    st.integers(1, 60),
    st.integers(1, 6),
    st.sampled_from([0.0, 0.1, 1.0, 5.0, 20.0]),
    st.sampled_from(["steps", "ramp", "rounded", "outliers"]),
    st.booleans(),
)
def test_cost_equals_the_dynamic_programme(seed, n, minimum, penalty, shape, weighted):
    rng = np.random.default_rng(seed)
    minimum = min(minimum, n)
    y = np.cumsum(rng.standard_normal(n) * (rng.random(n) < 0.1) * 5) + rng.standard_normal(n)
    shapes = {"steps": y, "ramp": 0.3 * np.arange(n) + 0.1 * y, "rounded": np.round(y)}
    y = shapes.get(shape, rng.standard_cauchy(n))
    weights = rng.integers(0, 3, n).astype(float) if weighted else np.ones(n)
    ends = optimal_partition(y, penalty, weights, minimum)
    lengths = np.diff(np.concatenate([[0], ends]))
    best = dynamic_programme(y - y.mean(), penalty, weights, minimum)
    assert ends[-1] == n
    assert lengths.min() >= minimum
    assert partition_cost(y, ends, penalty, weights) == pytest.approx(best, rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("minimum", [2, 5])
def test_newcomers_that_enter_late_stay_exact_among_outliers(minimum):
    rng = np.random.default_rng(5)
    for _ in range(40):
        y = rng.standard_cauchy(90)
        ends = optimal_partition(y, 0.0, minimum_length=minimum)
        best = dynamic_programme(y - y.mean(), 0.0, np.ones(len(y)), minimum)
        assert partition_cost(y, ends, 0.0) == pytest.approx(best, rel=1e-9)


def test_more_candidates_than_the_first_room_holds():
    """A smooth ramp keeps more than 85 candidates alive: the room grows, and nothing is lost."""
    y = np.linspace(-230, 230, 700)
    ends = optimal_partition(y, 1e6)
    best = dynamic_programme(y, 1e6, np.ones(len(y)), 1)
    assert partition_cost(y, ends, 1e6) == pytest.approx(best, rel=1e-9)


@pytest.mark.parametrize("minimum", [1, 3])
def test_a_smooth_ramp_keeps_many_candidates_and_stays_exact(minimum):
    y = np.linspace(0, 30, 700) ** 1.1
    ends = optimal_partition(y, 5.0, minimum_length=minimum)
    best = dynamic_programme(y - y.mean(), 5.0, np.ones(len(y)), minimum)
    assert partition_cost(y, ends, 5.0) == pytest.approx(best, rel=1e-9)


@pytest.mark.parametrize("seed", range(8))
def test_never_above_ruptures(seed):
    rng = np.random.default_rng(seed)
    y = np.repeat(rng.standard_normal(12) * 4, rng.integers(3, 40, 12))
    y = y + rng.standard_normal(len(y))
    penalty = 3 * np.log(len(y))
    theirs = ruptures.KernelCPD(kernel="linear", jump=1, min_size=1).fit(y[:, None]).predict(pen=penalty)
    pelt = ruptures.Pelt(model="l2", jump=1, min_size=1).fit(y[:, None]).predict(pen=penalty)
    ours = partition_cost(y, optimal_partition(y, penalty), penalty)
    assert ours <= partition_cost(y, theirs, penalty) * (1 + 1e-12)
    assert ours <= partition_cost(y, pelt, penalty) * (1 + 1e-12)


@pytest.mark.parametrize("scale", [1.0, 1e-6, 1e-12, 1e9])
def test_scale_and_offset_change_nothing(scale):
    rng = np.random.default_rng(3)
    y = np.repeat([0.0, 3.0, 1.0, 5.0], 50) + rng.standard_normal(200)
    ends = optimal_partition(y, 16.0)
    assert np.array_equal(optimal_partition(scale * (y + 7), 16.0 * scale**2), ends)


def test_reversal_and_replication():
    rng = np.random.default_rng(4)
    y = np.repeat([0.0, 3.0, 1.0], 40) + rng.standard_normal(120)
    ends = optimal_partition(y, 12.0)
    backward = optimal_partition(y[::-1], 12.0)
    assert np.array_equal(np.sort(len(y) - backward[:-1]), ends[:-1])
    doubled = optimal_partition(np.repeat(y, 2), 24.0)
    assert np.array_equal(doubled, 2 * ends)
    assert np.array_equal(optimal_partition(y, 24.0, np.full(120, 2.0)), ends)


def test_missing_samples_have_no_weight():
    y = np.repeat([0.0, 1.0], 50)
    y[20:30], y[60] = np.nan, np.nan
    ends = optimal_partition(y, 0.1)
    assert ends.tolist() == [50, 100]
    assert optimal_partition(np.full(5, np.nan), 1.0).tolist() == [5]


def test_read_only_strided_and_short_inputs():
    y = np.repeat([0.0, 1.0], 50)
    y.flags.writeable = False
    assert optimal_partition(y[::2], 0.1).tolist() == [25, 50]
    assert optimal_partition([], 1.0).tolist() == []
    assert optimal_partition([2.0], 1.0).tolist() == [1]
    assert optimal_partition([1.0, 9.0], 0.1, minimum_length=5).tolist() == [2]


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        ({"penalty": -1.0}, "penalty"),
        ({"penalty": np.nan}, "penalty"),
        ({"penalty": 1.0, "minimum_length": 0}, "minimum"),
        ({"penalty": 1.0, "weights": [1.0]}, "weights"),
        ({"penalty": 1.0, "weights": [1.0, -1.0]}, "weight"),
    ],
)
def test_bad_calls(arguments, word):
    with pytest.raises(CallError, match=word):
        optimal_partition([1.0, 2.0], **arguments)


def line_programme(y, candidates, share, penalty, noisiest=4.0):
    """The same optimum of straight lines by trying every pair of candidates with numpy's polynomial fit."""
    bounds = [0, *candidates]
    best = np.full(len(bounds), np.inf)
    best[0] = -penalty
    for t in range(1, len(bounds)):
        for s in range(t):
            part = y[bounds[s] : bounds[t]]
            x = np.arange(len(part))
            rest = np.sum((part - np.polyval(np.polyfit(x, part, 1), x)) ** 2) if len(part) > 2 else 0.0
            expected = share * len(part)
            excess = min(max(rest / expected, 1.0), noisiest)
            cost = expected * np.log(excess) + rest / excess
            best[t] = min(best[t], best[s] + cost + penalty)
    return best[-1]


@pytest.mark.parametrize("seed", range(6))
def test_lines_are_optimal_on_their_candidates(seed):
    rng = np.random.default_rng(seed)
    y = np.concatenate([np.full(30, 9.0), np.linspace(5, -5, 25), np.full(40, -8.0)]) + rng.standard_normal(95)
    candidates = np.unique(np.concatenate([rng.integers(1, 95, 20), [30, 55, 95]]))
    penalty, share = 12.0, 0.8
    ends, moments = partition_lines(y, np.ones(95), candidates, np.full(len(candidates), share), penalty)
    cost, begin = -penalty, 0
    for end, row in zip(ends, moments, strict=True):
        part, x = y[begin:end], np.arange(end - begin)
        rest = np.sum((part - np.polyval(np.polyfit(x, part, 1), x)) ** 2) if len(part) > 2 else 0.0
        assert row[0] == end - begin
        assert row[2] == pytest.approx(part.mean())
        excess = min(max(rest / (share * len(part)), 1.0), 4.0)
        cost += penalty + share * len(part) * np.log(excess) + rest / excess
        begin = int(end)
    assert begin == 95
    assert cost == pytest.approx(line_programme(y, candidates, share, penalty), rel=1e-9)

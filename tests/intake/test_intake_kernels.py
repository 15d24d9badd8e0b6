"""Kernels of intake against what they are defined to be, in plain numpy."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meseta.intake.calibration.stored_kernels import scale_into, turn_into
from meseta.intake.kernels import drive_piece, drive_steps, find_turns, power_of_ten, rising_rows


def turns_of(values, threshold, block=None):
    state, turns = np.zeros(6), []
    for start in range(0, len(values), block or len(values)):
        turns += find_turns(
            np.ascontiguousarray(values[start : start + (block or len(values))]), start, threshold, state
        )
    last = [int(state[4] if state[0] > 0 else state[2])] if state[0] else []
    return turns + last


@settings(deadline=None, max_examples=200)
@given(
    st.lists(st.one_of(st.integers(-20, 20), st.just(None)), min_size=2, max_size=60),
    st.integers(1, 15),
    st.sampled_from([1.0, 1e-6]),
    st.integers(1, 9),
)
def test_turning_points_are_the_extremes_between_swings_of_the_size(values, threshold, scale, block):
    """Swings alternate and are large enough; no leg holds a counter-swing of the size; turns are its ends."""
    row = np.array([np.nan if value is None else value * scale for value in values])
    size = threshold * scale
    turns = turns_of(row, size)
    assert turns_of(row, size, block) == turns  # whatever blocks it comes in
    swings = np.diff(row[turns])
    assert (np.abs(swings) >= size * (1 - 1e-12)).all()
    assert (np.sign(swings[1:]) == -np.sign(swings[:-1])).all()
    for first, last, swing in zip(turns, turns[1:], swings, strict=False):
        leg = row[first : last + 1][~np.isnan(row[first : last + 1])] * np.sign(swing)
        assert leg[0] == leg.min()
        assert leg[-1] == leg.max()
        assert (np.maximum.accumulate(leg) - leg < size * (1 + 1e-12)).all()
    if not turns:
        there = row[~np.isnan(row)]
        assert len(there) == 0 or there.max() - there.min() < size * (1 + 1e-12)


@pytest.mark.parametrize("bent", [False, True])
def test_steps_of_the_drive(bent):
    rng = np.random.default_rng(1)
    lengths = np.array([0, 1, 2, 50, 7])
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    slopes = rng.normal(size=5)
    rows = [3.0 * place + slopes[place] * np.arange(count) for place, count in enumerate(lengths)]
    if bent:
        rows[3] = rows[3] + 1e-3 * np.arange(50) ** 2
    values = np.concatenate(rows)
    start, step, relative = np.empty(5), np.empty(5), np.empty(len(values), np.float32)
    assert drive_steps(values, offsets, 1e-7, start, step, relative) is not bent
    for place, row in enumerate(rows):
        if len(row) == 0:
            assert np.isnan(start[place])
            continue
        assert start[place] == row[0]
        assert step[place] == pytest.approx((row[-1] - row[0]) / (len(row) - 1) if len(row) > 1 else 0.0)
        np.testing.assert_array_equal(relative[offsets[place] : offsets[place + 1]], (row - row[0]).astype(np.float32))


def test_a_piece_of_a_trace_has_the_drive_of_the_whole():
    values = 2.0 + 0.3 * np.arange(40)
    relative = np.empty(15, np.float32)
    assert drive_piece(values[20:35].copy(), 20, 2.0, 0.3, 1e-7, relative)
    np.testing.assert_array_equal(relative, (values[20:35] - 2.0).astype(np.float32))
    assert not drive_piece(values[20:35].copy(), 20, 2.0, 0.31, 1e-7, relative)


def test_powers_of_ten_equal_the_mathematics_library():
    exponents = np.concatenate([np.linspace(-300, 300, 61), [np.nan, np.inf, -np.inf, 0.0]])
    found = power_of_ten(exponents)
    expected = [math.pow(10.0, one) for one in exponents.tolist()]
    np.testing.assert_array_equal(found, expected)


@pytest.mark.parametrize("scale", [1.0, 1e-9])
def test_rows_that_end_higher_than_they_begin(scale):
    rng = np.random.default_rng(2)
    lengths = rng.integers(1, 60, 80)
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    values = (scale * rng.normal(size=offsets[-1]) * 10 ** rng.uniform(-2, 2, offsets[-1])).astype(np.float32)
    values[rng.random(len(values)) < 0.1] = np.nan
    rows = np.arange(80)
    found = np.empty(80, np.bool_)
    rising_rows(values, offsets, rows, 16, 10.0, found)

    def median_size(part):
        part = np.abs(part[np.isfinite(part)])
        return np.sort(part)[(len(part) - 1) // 2] if len(part) else np.nan

    with np.errstate(invalid="ignore"):
        expected = [
            median_size(values[b - min(16, b - a) : b]) > 10.0 * median_size(values[a : a + min(16, b - a)])
            for a, b in pairwise(offsets)
        ]
    np.testing.assert_array_equal(found, expected)
    assert 2 < found.sum() < 75


@pytest.mark.parametrize("kind", ["int16", "uint16", "int32", "float32", "float64"])
@pytest.mark.parametrize(
    "steps",
    [(1.0, 0.0, 1.0, 0.0, 1.0, 1.0), (0.01, -3.0, 1e-9, 0.0, 1.0, 7.7e-6), (1e-3, 0.2, 1.0, 0.013, 1e7, 7.7e-6)],
)
def test_scaling_in_one_go_gives_the_bits_of_the_steps_of_numpy(kind, steps):
    rng = np.random.default_rng(3)
    stored = rng.normal(0, 9000, 5000).astype(kind)
    if kind.startswith("float"):
        stored[[3, 50, 700, 900]] = np.nan, np.inf, -0.0, 1e30
    scale, offset, factor, shift, first, second = steps
    values = stored.astype(np.float64)
    values = values if scale == 1.0 else values * scale
    values = values if offset == 0.0 else values + offset
    with np.errstate(over="ignore"):
        expected = ((values * factor - shift) / first / second).astype(np.float32)
    found = np.empty(5000, np.float32)
    scale_into(stored, *steps, found)
    np.testing.assert_array_equal(found, expected)
    np.testing.assert_array_equal(np.signbit(found), np.signbit(expected))


@pytest.mark.parametrize("shape", [(1, 1), (3, 70), (70, 3), (32, 32), (33, 95)])
@pytest.mark.parametrize("kind", ["int16", "float32", "float64"])
def test_columns_end_to_end_are_those_of_numpy(kind, shape):
    array = np.random.default_rng(1).normal(0, 1000, shape).astype(kind)
    found = np.empty(shape[::-1], kind)
    turn_into(array, found)
    np.testing.assert_array_equal(found, array.T)

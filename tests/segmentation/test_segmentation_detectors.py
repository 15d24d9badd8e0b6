"""The two simpler detectors against cases worked by hand."""

import numpy as np
import pytest

from meseta.segmentation.detectors import derivative_rows, level_rows
from meseta.segmentation.joining_kernels import Rules
from meseta.segmentation.results import NoiseModel

NOISE = NoiseModel(
    0.0, 1e-6, 5, np.array([1e-6, 1.0]), np.array([1e-6, 0.01]), np.array([1e-6, 0.01]), 1.0, 0.0, np.inf, -10.0
)
# Slope bound 3 decades a unit of drive, shortest plateau 10 samples, nothing below 1e-5.
RULES = Rules(3, 4, 1e-5, np.inf, np.inf, 3.0, 10.0, 0.15, 0.25, 0.35, 0.1, 0.3, 10, 0.0, 0.0, 1)
STEP = np.array([0.01])
TRACE, BEGIN, END, LEVEL, SLOPE, SPREAD, CENSORED, MISSING, GAP = 0, 1, 2, 3, 4, 5, 9, 12, 13


def test_derivative_cuts_half_a_window_before_and_after_a_jump():
    # 40 samples at 1, 40 at 0.1.  A window of 5 samples that holds both sees at least 0.2 decades a sample (two of the
    # least-squares slopes of a unit step are 0.2 and 0.3), the bound is 0.03: samples 38 to 41 are no plateau.
    g = np.repeat([1.0, 0.1], 40)
    rows = derivative_rows([g], STEP, RULES, NOISE, 5)
    assert rows[:, [BEGIN, END]].tolist() == [[0, 38], [42, 80]]
    assert rows[:, LEVEL] == pytest.approx([1.0, 0.1])
    assert rows[:, CENSORED].tolist() == [0, 1]


def test_derivative_keeps_a_slope_within_the_bound_and_drops_one_beyond():
    x = np.arange(60)
    gentle, steep = 1e-3 * 10 ** (-0.02 * x), 1e-3 * 10 ** (-0.04 * x)
    rows = derivative_rows([gentle, steep], np.array([0.01, 0.01]), RULES, NOISE, 5)
    assert rows[:, TRACE].tolist() == [0]
    assert rows[0, SLOPE] == pytest.approx(-0.02)
    assert rows[0, SPREAD] == pytest.approx(0.0, abs=1e-9)


def test_derivative_breaks_at_a_gap():
    g = np.full(60, 1.0)
    g[30] = np.nan
    rows = derivative_rows([g], STEP, RULES, NOISE, 3)
    assert all(not row[BEGIN] <= 30 < row[END] for row in rows)
    assert len(rows) == 2


def test_levels_take_the_stay_between_the_last_crossings():
    # Levels 1.5, 0.5: the last sample at or above 1.5 is 49 (an excursion), the last at or above 0.5 is 89.
    g = np.concatenate([np.full(30, 2.0), np.full(60, 1.0), np.full(30, 0.1)])
    g[49] = 1.6
    rows = level_rows([g], STEP, RULES, np.array([0.05, 0.5, 1.5]))
    inside = rows[rows[:, LEVEL] > 0.5]
    assert inside[:, [BEGIN, END]].tolist() == [[50, 90]]
    assert inside[0, LEVEL] == pytest.approx(1.0)
    below = rows[rows[:, LEVEL] < 0.5]
    assert below[:, [BEGIN, END]].tolist() == [[90, 120]] and below[0, CENSORED] == 1


def test_levels_refuse_what_tunnelling_would_cross_as_fast_and_what_is_short():
    decay = 1.0 * 10 ** (-0.1 * np.arange(40))
    assert not len(level_rows([decay], STEP, RULES, np.array([1e-4, 1e-2, 0.5])))
    short = np.concatenate([np.full(30, 2.0), np.full(9, 1.0), np.full(30, 1e-6)])
    assert not len(level_rows([short], STEP, RULES, np.array([0.5, 1.5])))


def test_missing_samples_are_counted():
    g = np.concatenate([np.full(30, 2.0), np.full(60, 1.0), np.full(30, 1e-6)])
    g[40:44], g[60] = np.nan, np.nan
    rows = level_rows([g], STEP, RULES, np.array([0.5, 1.5]))
    assert rows[0, [BEGIN, END, MISSING, GAP]].tolist() == [30, 90, 5, 4]

"""Zero of displacement: worked examples, a plain twin of the kernel, and invariances."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meseta.intake import ALIGNMENT_STATUS, Alignment, align
from meseta.recipe.alignment import AlignmentSettings
from meseta.traces import TraceSet

DEFAULT = AlignmentSettings()


def words(alignment: Alignment) -> list[str]:
    return [ALIGNMENT_STATUS[code] for code in alignment.status]


def plain_crossing(values: np.ndarray, level: float, first: bool, stay: int) -> tuple[int, float]:
    """The definition, word by word, in plain Python (twin of the kernel)."""
    hits = []
    for index, value in enumerate(values):
        after = [v for v in values[index + 1 :] if not math.isnan(v)][:stay]
        if value >= level and len(after) == stay and all(v < level for v in after):
            hits.append(index)
    above = [index for index, value in enumerate(values) if value >= level]
    if not first and hits and hits[-1] != above[-1]:
        hits = []
    if not hits:
        return -1, math.nan
    found = hits[0] if first else hits[-1]
    further = next(index for index in range(found + 1, len(values)) if not math.isnan(values[index]))
    here, after = float(values[found]), float(values[further])
    if not after > 0:
        return found, 0.0
    return found, (further - found) * (math.log(here) - math.log(level)) / (math.log(here) - math.log(after))


def test_worked_example_interpolates_in_log_g():
    """Halfway in log G between 1 and 0.25 lies 0.5: the zero is half a step on."""
    traces = TraceSet.from_arrays([[2, 1, 0.25, 1e-4, 1e-4]], step_nm=0.1)
    found = align(traces, DEFAULT, ("pull",))
    assert found.zero_sample.tolist() == [1]
    assert found.zero_drive[0] == pytest.approx(0.15, abs=1e-12)


def test_no_interpolation_into_a_reading_that_is_not_positive():
    traces = TraceSet.from_arrays([[2, 1, -1e-6, 1e-4, 1e-4], [2, 1, 0, 1e-4, 1e-4]], step_nm=0.1)
    assert align(traces, DEFAULT, ("pull",)).zero_drive == pytest.approx([0.1, 0.1], abs=1e-12)


@pytest.mark.parametrize("missing", [1, 2, 7])
@pytest.mark.parametrize("decades", [0.05, 0.4, 2.0])
def test_an_exponential_decay_has_its_zero_exactly_however_few_samples_it_has(missing, decades):
    """G = 0.5 G0 10^(-a (z - z0)): log G is straight, also across readings that are missing where it crosses."""
    rng = np.random.default_rng(3)
    place = np.arange(60.0)
    rows, zeros = [], 20 + rng.random(30)
    for zero in zeros:
        row = 0.5 * 10.0 ** np.minimum(-decades * (place - zero), 30)
        begin = int(zero) + 1 - rng.integers(0, missing + 1)
        row[begin : begin + missing] = np.nan
        rows.append(row)
    for backwards in (False, True):
        turned = [row[::-1] for row in rows] if backwards else rows
        drive = place[::-1] if backwards else place
        direction = "closing" if backwards else "opening"
        traces = TraceSet.from_arrays(turned, displacement_nm=[drive] * 30, direction=direction)
        found = align(traces, DEFAULT, ("push",) if backwards else ("pull",))
        np.testing.assert_allclose(found.zero_drive, zeros, atol=2e-4)


@pytest.mark.parametrize("missing", [1, 4])
def test_a_break_between_readings_that_are_missing_lies_half_way_for_the_jump(missing):
    row = np.concatenate([np.full(20, 1.0), np.full(missing, np.nan), np.full(20, 1e-3)])
    found = align(TraceSet.from_arrays([row], step_nm=1.0), AlignmentSettings(crossing="jump"), ("pull",))
    assert found.zero_drive[0] == 19 + 0.5 * (missing + 1)


def test_every_status_has_its_trace():
    rows = [[1, 1, 0.1, 0.1, 0.1], [0.2, 0.2, 0.1, 0.1, 0.1], [1, 0.1, 0.1, 0.1, 1], [1, 1, 1, 0.1, 0.1]]
    traces = TraceSet.from_arrays(rows, step_nm=1.0)
    assert words(align(traces, DEFAULT, ("pull",))) == [
        "aligned",
        "never reaches the level",
        "ends above the level",
        "ends above the level",
    ]
    assert words(align(traces, DEFAULT, ("push",))) == ["no samples in this phase"] * 4


def test_last_and_first_crossing_differ_for_a_trace_that_closes_again():
    rows = [[1, 0.1, 0.1, 0.1, 1, 1, 0.1, 0.1, 0.1]]
    traces = TraceSet.from_arrays(rows, step_nm=1.0)
    last = align(traces, DEFAULT, ("pull",))
    first = align(traces, AlignmentSettings(crossing="first"), ("pull",))
    assert (last.zero_sample[0], first.zero_sample[0]) == (5, 0)


def test_closing_is_the_mirror_image_of_opening():
    rows = [[2, 1, 0.25, 1e-4, 1e-4]]
    opening = align(TraceSet.from_arrays(rows, step_nm=0.1), DEFAULT, ("pull",))
    closing = align(
        TraceSet.from_arrays([rows[0][::-1]], displacement_nm=[[0.4, 0.3, 0.2, 0.1, 0.0]], direction="closing"),
        DEFAULT,
        ("push",),
    )
    assert closing.zero_sample.tolist() == [3]
    assert closing.zero_drive == pytest.approx(opening.zero_drive, abs=1e-7)


def test_explicit_and_constant_steps_agree_and_inputs_stay_untouched():
    rng = np.random.default_rng(4)
    rows = np.exp(rng.normal(-1, 2, (30, 200))).astype(np.float32)
    rows[:, -20:] = 1e-5
    axis = 0.25 + 0.002 * np.arange(200)
    constant = align(TraceSet.from_arrays(rows, step_nm=0.002), DEFAULT, ("pull",))
    explicit = align(TraceSet.from_arrays(rows, displacement_nm=axis), DEFAULT, ("pull",))
    assert explicit.zero_drive == pytest.approx(constant.zero_drive + 0.25, abs=1e-6)


def test_blocks_joined_equal_the_whole():
    rng = np.random.default_rng(5)
    traces = TraceSet.from_arrays(np.exp(rng.normal(-1, 2, (17, 50))), step_nm=0.002)
    whole = align(traces, DEFAULT, ("pull",))
    parts = [align(traces.block(a, b), DEFAULT, ("pull",)) for a, b in ((0, 5), (5, 6), (6, 17))]
    joined = Alignment.joined(parts)
    np.testing.assert_array_equal(joined.zero_drive, whole.zero_drive)
    np.testing.assert_array_equal(joined.status, whole.status)
    np.testing.assert_array_equal(whole.block(5, 6).zero_sample, parts[1].zero_sample)


@settings(deadline=None, max_examples=150)
@given(
    st.lists(st.one_of(st.floats(-0.125, 2, width=32), st.just(float("nan"))), min_size=1, max_size=40),
    st.booleans(),
    st.integers(1, 4),
    st.sampled_from([1.0, 1e-6]),
)
def test_kernel_equals_the_definition(values, first, stay, scale):
    row = (np.array(values, np.float32) * np.float32(scale)).astype(np.float32)
    level = 0.5 * scale
    traces = TraceSet.from_arrays([row], step_nm=1.0)
    chosen = AlignmentSettings(zero_at_g0=level, crossing="first" if first else "last", stay_samples=stay)
    found = align(traces, chosen, ("pull",))
    sample, fraction = plain_crossing(row, level, first, stay)
    assert found.zero_sample[0] == sample
    if sample >= 0:
        assert found.zero_drive[0] == pytest.approx(sample + fraction, rel=1e-12)


def plain_jump(values: np.ndarray, level: float, stay: int) -> int:
    """The definition, word by word, in plain Python (twin of the kernel)."""
    there = [(index, float(value)) for index, value in enumerate(values) if not math.isnan(value)]
    best, found = 0.0, -1
    for at in range(stay - 1, len(there) - stay):
        before = [value for _, value in there[at - stay + 1 : at + 1]]
        after = [value for _, value in there[at + 1 : at + 1 + stay]]
        logs = [[math.log(max(value, 1e-4 * level)) for value in side] for side in (before, after)]
        fall = sum(logs[0]) - sum(logs[1])
        half = stay * math.log(0.5 * level)
        through = sum(logs[0]) >= half > sum(logs[1])
        if through and max(after) < level and fall >= best:
            best, found = fall, there[at][0]
    return found


@settings(deadline=None, max_examples=150)
@given(
    st.lists(
        st.one_of(st.sampled_from([0.0, 0.011, 0.23, 0.31, 0.5, 1.3, 2.9]), st.just(float("nan"))),
        min_size=1,
        max_size=30,
    ),
    st.integers(1, 4),
    st.sampled_from([1.0, 1e-6]),
)
def test_jump_kernel_equals_the_definition(values, stay, scale):
    row = (np.array(values, np.float32) * np.float32(scale)).astype(np.float32)
    level = float(np.float32(0.5) * np.float32(scale))
    traces = TraceSet.from_arrays([row], step_nm=1.0)
    chosen = AlignmentSettings(zero_at_g0=level, crossing="jump", stay_samples=stay)
    found = align(traces, chosen, ("pull",))
    sample = plain_jump(row, level, stay)
    assert found.zero_sample[0] == sample
    if sample >= 0:
        further = next(index for index in range(sample + 1, len(row)) if not math.isnan(row[index]))
        assert found.zero_drive[0] == 0.5 * (sample + further)


def test_a_plateau_at_the_level_does_not_move_the_jump():
    """A noisy plateau at 0.5 G0 that breaks at a known sample: the jump is exact, the last crossing lies before it."""
    rng = np.random.default_rng(7)
    breaks = rng.integers(150, 250, 200)
    rows = [
        np.concatenate([np.full(100, 1.0), 0.5 * np.exp(0.05 * rng.normal(size=at - 100)), 1e-3 * np.ones(300 - at)])
        for at in breaks
    ]
    traces = TraceSet.from_arrays(rows, step_nm=1.0)
    jump = align(traces, AlignmentSettings(crossing="jump"), ("pull",))
    np.testing.assert_array_equal(jump.zero_drive, breaks - 0.5)
    last = align(traces, DEFAULT, ("pull",))
    assert np.mean(np.abs(last.zero_drive - breaks) > 1) > 0.3


def test_the_jump_of_a_closing_trace_is_the_mirror_image():
    row = [1, 1, 1, 0.9, 1e-3, 1e-4, 1e-5, 1e-5]
    chosen = AlignmentSettings(crossing="jump", stay_samples=2)
    opening = align(TraceSet.from_arrays([row], step_nm=0.1), chosen, ("pull",))
    back = TraceSet.from_arrays([row[::-1]], displacement_nm=[np.arange(8)[::-1] * 0.1], direction="closing")
    closing = align(back, chosen, ("push",))
    assert opening.zero_drive[0] == pytest.approx(0.35)
    assert closing.zero_drive[0] == pytest.approx(0.35, abs=1e-7)
    assert closing.zero_sample[0] == 4


def test_traces_without_a_jump_are_flagged():
    rows = [[0.2] * 8, [1.0] * 8, [1, 1, 1, 0.1, 0.1, 1, 1, 1]]
    found = align(TraceSet.from_arrays(rows, step_nm=1.0), AlignmentSettings(crossing="jump"), ("pull",))
    assert words(found) == ["never reaches the level", "ends above the level", "ends above the level"]
    assert np.isnan(found.zero_drive).all()

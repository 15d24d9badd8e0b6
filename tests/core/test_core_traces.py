"""TraceSet: blocks, selections and identities never mix traces up."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta import TraceSet
from meseta.errors import CallError
from meseta.traces import TraceIdentity
from meseta.work import Work


def make(lengths, explicit=False):
    rng = np.random.default_rng(7)
    rows = [rng.normal(size=length).astype(np.float32) for length in lengths]
    if explicit:
        axes = [np.cumsum(rng.uniform(0.1, 1, length)) for length in lengths]
        return rows, TraceSet.from_arrays(rows, axes, molecule=np.arange(len(rows)))
    return rows, TraceSet.from_arrays(rows, step_nm=0.002, molecule=np.arange(len(rows)))


@given(st.lists(st.integers(1, 40), min_size=1, max_size=25), st.integers(1, 100), st.booleans())
def test_blocks_hold_the_same_traces(lengths, block_samples, explicit):
    rows, traces = make(lengths, explicit)
    trace = 0
    for block in traces.each_block(Work(threads=1, block_samples=block_samples)):
        for row in range(block.traces):
            assert np.array_equal(block.trace_conductance(row), rows[trace])
            assert np.array_equal(block.trace_drive(row), traces.trace_drive(trace))
            assert block.table["molecule"][row] == trace
            assert block.phase_range(["pull"])[1][row] == lengths[trace]
            assert block.identity(row) == traces.identity(trace)
            trace += 1
    assert trace == len(lengths)


@given(st.lists(st.integers(1, 30), min_size=1, max_size=12), st.data(), st.booleans())
def test_taking_traces_keeps_their_content_and_order(lengths, data, explicit):
    rows, traces = make(lengths, explicit)
    chosen = data.draw(st.lists(st.integers(0, len(lengths) - 1), min_size=1, max_size=10))
    taken = traces.take(chosen)
    for row, trace in enumerate(chosen):
        assert np.array_equal(taken.trace_conductance(row), rows[trace])
        assert np.array_equal(taken.trace_drive(row), traces.trace_drive(trace))
        assert taken.phase_range(["pull"])[1][row] == lengths[trace]


def test_a_mask_takes_the_same_as_row_numbers():
    _, traces = make([3, 4, 5])
    assert traces.take(np.array([True, False, True])).key == traces.take([0, 2]).key


def test_identity_text_reads_back_even_with_odd_dataset_names():
    identity = TraceIdentity("ab" * 32, "group|a/b c", 12, "closing")
    assert TraceIdentity.parse(identity.text()) == identity


def test_the_key_follows_the_content():
    rows, traces = make([5, 6])
    assert TraceSet.from_arrays(rows, step_nm=0.002).key == traces.key
    assert TraceSet.from_arrays(rows, step_nm=0.003).key != traces.key
    assert TraceSet.from_arrays(rows[::-1], step_nm=0.002).key != traces.key


def test_lengths_that_do_not_agree_are_refused():
    with pytest.raises(CallError, match="different lengths"):
        TraceSet.from_arrays([[1.0, 2.0], [1.0, 2.0, 3.0]], [0.0, 0.1])
    with pytest.raises(CallError, match="no traces"):
        TraceSet.from_arrays([])


def test_a_2d_array_with_one_shared_axis():
    traces = TraceSet.from_arrays(np.ones((3, 4)), [0.0, 0.1, 0.2, 0.4])
    assert np.allclose(traces.trace_drive(2), [0, 0.1, 0.2, 0.4])
    assert traces.drive.is_displacement


def test_closings_have_a_push_phase():
    traces = TraceSet.from_arrays(np.ones((2, 4)), step_nm=0.1, direction=["opening", "closing"])
    assert traces.phase_range(["pull"])[1].tolist() == [4, 0]
    assert traces.phase_range(["push"])[1].tolist() == [0, 4]

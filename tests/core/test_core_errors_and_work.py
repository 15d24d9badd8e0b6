"""Errors in one line; long work in blocks, in order, cancellable."""

from __future__ import annotations

import threading
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta.errors import Cancelled, InputError, MesetaError, RecipeError, nearest
from meseta.work import Work, blocks_of


def test_an_error_is_one_line_with_place_and_remedy():
    error = InputError("is not\na recording", "night 3.h5", "check\tthe file")
    assert str(error) == "night 3.h5: is not a recording -> check the file"
    assert error.exit_code == 2
    assert MesetaError("x").exit_code == 1
    assert Cancelled().exit_code == 130
    assert isinstance(RecipeError("x"), MesetaError)


def test_nearest_proposes_close_words_or_lists_what_is_known():
    assert nearest("sensitivty", ["sensitivity", "method"]) == "did you mean 'sensitivity'?"
    assert nearest("zzz", ["alpha", "beta"]) == "known: alpha, beta"


@given(st.lists(st.integers(0, 50), min_size=1, max_size=60), st.integers(1, 200))
def test_blocks_cover_all_traces_in_order(lengths, block_samples):
    offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
    blocks = blocks_of(offsets, block_samples)
    assert [trace for first, last in blocks for trace in range(first, last)] == list(range(len(lengths)))
    for first, last in blocks:
        assert last == first + 1 or offsets[last] - offsets[first] <= block_samples


@pytest.mark.parametrize("threads", [1, 2, 5])
def test_results_come_in_order_on_any_number_of_threads(threads):
    told = []
    work = Work(threads=threads, report=told.append)
    results = list(work.each(lambda item: item * item, list(range(40)), "squaring", sizes=[2] * 40))
    assert results == [item * item for item in range(40)]
    assert told[0].done == 0
    assert told[-1].done == told[-1].total == 80
    assert all(earlier.done <= later.done for earlier, later in pairwise(told))


@pytest.mark.parametrize("threads", [1, 3])
def test_cancel_takes_effect_within_a_block(threads):
    work = Work(threads=threads)
    seen = []
    with pytest.raises(Cancelled):
        for result in work.each(lambda item: item, list(range(1000)), "counting"):
            seen.append(result)
            work.cancel.set()
    assert len(seen) == 1


def test_an_error_in_a_worker_reaches_the_caller_and_leaves_no_thread():
    def fail(item):
        raise InputError("damaged", f"block {item}")

    before = threading.active_count()
    with pytest.raises(InputError, match="block 0"):
        list(Work(threads=2).each(fail, [0, 1, 2], "failing"))
    assert threading.active_count() == before

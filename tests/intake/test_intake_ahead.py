"""Reading ahead gives the samples that are asked for, and reads each but once on the way from front to back."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from meseta.intake.cutting.ahead import AHEAD_SAMPLES, ReadAhead

STORED = np.arange(5 * AHEAD_SAMPLES, dtype=np.int32)


class Counted:
    """Samples of a file that count what is read of them."""

    def __init__(self):
        self.samples = 0

    def __len__(self):
        return len(STORED)

    def read(self, start, stop):
        self.samples += stop - start
        return STORED[start:stop]


place = st.integers(0, len(STORED))


@given(st.lists(st.tuples(place, place), max_size=12))
def test_what_is_asked_for_is_given_in_any_order(asked):
    ahead = ReadAhead(Counted())
    for one, other in asked:
        start, stop = sorted((one, other))
        np.testing.assert_array_equal(ahead.read(start, stop), STORED[start:stop])


def test_from_front_to_back_samples_are_read_once_and_probes_far_apart_cost_no_more_than_they_ask():
    counted = Counted()
    ahead = ReadAhead(counted)
    for start in range(0, len(STORED) - 3000, 1500):
        ahead.read(start, start + 3000)
    assert counted.samples < 1.1 * len(STORED)
    before = counted.samples
    for start in (0, 3 * AHEAD_SAMPLES, 0):
        ahead.read(start, start + 10)
    assert counted.samples - before == 30

"""The lengths at which chains are looked at."""

from itertools import pairwise

from hypothesis import given
from hypothesis import strategies as st

from starkiln.inference.ensemble import PATIENCE, Stopping


@given(st.integers(64, 100_000))
def test_lengths_rise_by_up_to_a_half_and_end_where_they_must(max_steps):
    lengths = Stopping(max_steps=max_steps).lengths()
    assert all(length % 2 == 0 for length in lengths)
    assert all(before < after <= 1.5 * before for before, after in pairwise(lengths))
    assert lengths[0] == 64
    assert lengths[-1] == max_steps - max_steps % 2
    assert PATIENCE in lengths or lengths[-1] < PATIENCE

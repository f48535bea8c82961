from collections import Counter

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import starkiln
from fake_stages import pass_through, stages
from small_survey import settings_for, stars, with_column
from starkiln.engine.repeats import copies, mark_repeats
from starkiln.tables import hashes


def expected_copies(ids):
    seen, counts, expected = Counter(), Counter(ids), []
    for star in ids:
        seen[star] += 1
        expected.append(0 if counts[star] == 1 else 1 if seen[star] == 1 else 2)
    return expected


@given(
    ids=st.lists(st.tuples(st.integers(-2, 2), st.integers(-2, 2)), max_size=40),
    order=st.randoms(use_true_random=False),
)
def test_the_first_copy_in_input_order_is_told_from_later_ones(ids, order):
    rows = np.array(sorted(order.sample(range(1000), len(ids))), np.int64)
    shuffled = np.array(order.sample(range(len(ids)), len(ids)), np.int64)
    digests = np.array(ids, np.int64).reshape(-1, 2)
    marks = mark_repeats(digests[shuffled], rows[shuffled])
    assert copies(marks, rows).tolist() == expected_copies(ids)


@pytest.mark.parametrize("half", [0, 1])
def test_ids_that_share_half_of_their_digests_are_no_repeats(half, monkeypatch):
    def weak(star_id):
        halves = [b"\0" * 8, star_id.rjust(8)]
        return halves[half] + halves[1 - half]

    monkeypatch.setattr(hashes, "id_digest", weak)
    table = with_column(stars(5), "star_id", [7, 8, 7, 9, 10])
    frame = starkiln.fit_table(table, settings_for("a"), stages=stages(pass_through))
    assert frame["star_id"].tolist() == [7, 8, 9, 10]
    assert [row["input_row"] for row in frame.attrs["rejected"]] == [2]

from itertools import pairwise

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from starkiln.engine import buckets

DTYPE = np.dtype([("id_hash", "<i8"), ("row", "<i8")])
HASHES = st.integers(-(2**63), 2**63 - 1)


class Buckets10(buckets.Buckets):
    """Buckets for about ten rows each."""

    def __init__(self, folder, rows):
        super().__init__(folder, rows * buckets.BUCKET_ROWS // 10, DTYPE)


@given(hashes=st.lists(HASHES, max_size=60), batch=st.integers(1, 20), rows=st.integers(0, 70))
def test_every_record_comes_back_once_in_ascending_ranges(tmp_path_factory, hashes, batch, rows):
    some = Buckets10(tmp_path_factory.mktemp("buckets") / "ids", rows)
    for first in range(0, len(hashes), batch):
        here = np.array(hashes[first : first + batch], np.int64)
        some.add(id_hash=here, row=np.arange(first, first + len(here)))
    drained = list(some.drain())
    assert sorted(int(row) for records in drained for row in records["row"]) == list(range(len(hashes)))
    assert all(hashes[row] == value for records in drained for value, row in records.tolist())
    assert len(drained) == max(1, -(-rows // 10))
    for lower, upper in pairwise(records for records in drained if len(records)):
        assert lower["id_hash"].max() < upper["id_hash"].min()


def test_evenly_spread_hashes_fill_buckets_evenly(tmp_path):
    some = Buckets10(tmp_path / "ids", 100)
    hashes = np.random.default_rng(1).integers(-(2**63), 2**63 - 1, 10_000)
    some.add(id_hash=hashes, row=np.arange(10_000))
    sizes = [len(records) for records in some.drain()]
    assert len(sizes) == 10
    assert min(sizes) > 850
    assert not list((tmp_path / "ids").iterdir())

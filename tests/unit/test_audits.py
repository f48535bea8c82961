"""What stars say of the zero points, packed: the same again, and nothing but arrays."""

import itertools
import pickle
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from starkiln.engine.audits import pack, pack_audit, packed_together, trimmed, unpack, unpack_audit
from starkiln.inference import audit
from starkiln.inference.audit import AuditSums, combined, no_stars
from starkiln.inference.posterior import Block


class Data(NamedTuple):
    band: NDArray[np.int64]
    limit: NDArray[np.bool_]


@dataclass(frozen=True)
class Pair:
    point: NDArray[np.float64]
    data: Data


class Sample(NamedTuple):
    key: NDArray[np.uint64]
    pair: Pair
    data: Data


def sample(stars):
    random = np.random.default_rng(stars)
    data = Data(random.integers(0, 2**62, (stars, 3)), random.random((stars, 3)) < 0.5)
    other = Data(random.integers(0, 9, stars), random.random((stars, 2)) < 0.5)
    point = random.normal(size=(stars, 7)) * 1e-300
    return Sample(random.integers(0, 2**64, stars, np.uint64), Pair(point, other), data)


def leaves(record):
    names = getattr(record, "_fields", None) or getattr(record, "__dataclass_fields__", None)
    return [record] if names is None else [leaf for name in names for leaf in leaves(getattr(record, name))]


@pytest.mark.parametrize("stars", [0, 1, 500])
def test_records_of_arrays_come_back_as_they_were(stars):
    given = sample(stars)
    found = unpack(pack(given), Sample)
    assert (type(found), type(found.pair), type(found.pair.data)) == (Sample, Pair, Data)
    for one, other in zip(leaves(given), leaves(found), strict=True):
        assert (one.dtype, one.shape, one.tobytes()) == (other.dtype, other.shape, other.tobytes())


def test_the_same_sums_are_the_same_bytes():
    assert pack(sample(20)) == pack(sample(20))


def test_sums_of_no_part_are_no_bytes():
    assert pack_audit(None) == b""
    assert unpack_audit(b"") is None
    assert packed_together([]) == packed_together([b"", b""]) == b""


def counted(record):
    """The record with arrays of its shapes that hold 0, 1, 2, ...; where it is of no star, of two."""
    names = getattr(record, "_fields", None)
    if names is not None:
        return type(record)(*(counted(getattr(record, name)) for name in names))
    shape = record.shape if record.shape[0] else (2, *record.shape[1:])
    return np.arange(np.prod(shape)).reshape(shape).astype(record.dtype)


def test_sums_are_added_up():
    one = counted(no_stars(3))
    found = unpack_audit(packed_together([b"", pack_audit(one), b"", pack_audit(one)]))
    for expected, array in zip(leaves(combined(one, one)), leaves(found), strict=True):
        assert expected.any()
        np.testing.assert_array_equal(array, expected)


def some_stars(keys):
    """Sums of stars with some keys."""
    keys = np.array(keys, np.uint64)
    sums = no_stars(3)
    block = Block(*(np.zeros((len(keys), *column.shape[1:]), column.dtype) for column in sums.block))
    points = np.repeat(keys[:, None].astype(float), sums.points.shape[1], axis=1)
    return AuditSums(keys, keys % 2 == 0, points, block)


@settings(max_examples=30)
@given(st.permutations(range(24)), st.lists(st.integers(0, 24), max_size=4).map(sorted))
def test_trimmed_parts_add_up_to_the_same_sums(keys, cuts):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(audit, "ENOUGH_STARS", 5)
        parts = [combined(some_stars(keys[a:b]), some_stars([])) for a, b in itertools.pairwise([0, *cuts, 24])]
        kept, total = [], some_stars([])
        for part in parts:
            kept.append(trimmed(pack_audit(part), total))
            total = combined(total, part)
        whole = packed_together(map(pack_audit, parts))
        assert packed_together(kept) == whole
        assert unpack_audit(whole).key.tolist() == [0, 1, 2, 3, 4]
    assert trimmed(pack_audit(some_stars([1, 2])), None) == pack_audit(some_stars([1, 2]))
    assert trimmed(b"", some_stars([1])) == b""


def test_stars_that_count_no_longer_are_not_kept(monkeypatch):
    monkeypatch.setattr(audit, "ENOUGH_STARS", 3)
    kept = trimmed(pack_audit(some_stars([1, 5, 7])), some_stars([2, 3, 4]))
    found = unpack_audit(kept)
    assert found.key.tolist() == [1]
    assert found.points[:, 0].tolist() == [1.0]
    assert found.block.limit.shape == (1, 3)


def test_no_object_is_ever_loaded():
    with pytest.raises(ValueError, match="allow_pickle=False"):
        unpack(pack(Data(np.array([{"an": "object"}], object), np.zeros(1, bool))), Data).band  # noqa: B018
    with pytest.raises((ValueError, OSError)):
        unpack(pickle.dumps(sample(1)), Sample)

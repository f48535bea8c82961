"""Hashes: what changes them, what must not, and values frozen so that a release does not refit everything."""

import hashlib
import itertools
import struct

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from small_survey import band, settings_for, stars, with_column
from starkiln.tables.hashes import canonical_ids, id_digests, id_hashes, marked, row_hashes

SETTINGS = settings_for("/survey")
ONE, ABC = [298446160052855758, 3775155053490983273], [3138212647195331279, 1619088549062707489]
FLOATS32 = st.floats(width=32, allow_nan=True, allow_infinity=True)


def hashes(table, settings=SETTINGS):
    return row_hashes(table, settings).tolist()


# ---- ids


@pytest.mark.parametrize(
    ("ids", "expected"),
    [
        (pa.array([2**63 - 1, None, -5], pa.int64()), [b"9223372036854775807", None, b"-5"]),
        (pa.array([2**64 - 1], pa.uint64()), [b"18446744073709551615"]),
        (pa.array([7, None], pa.int16()), [b"7", None]),
        (pa.array(["7", "", None, " ", "α"]), [b"7", None, None, b" ", "α".encode()]),
        (pa.array(["a", "", None], pa.large_string()), [b"a", None, None]),
        (pa.array(["a", None, "a"]).dictionary_encode(), [b"a", None, b"a"]),
        (pa.chunked_array([[1], [2, None]]), [b"1", b"2", None]),
        (pa.array([], pa.int64()), []),
    ],
)
def test_canonical_ids(ids, expected):
    assert canonical_ids(ids) == expected


@given(st.lists(st.none() | st.integers(-(2**63), 2**63 - 1)))
def test_integer_ids_are_exact_next_to_nulls(ids):
    expected = [None if star_id is None else str(star_id).encode() for star_id in ids]
    assert canonical_ids(pa.array(ids, pa.int64())) == expected


def test_id_digests_are_frozen():
    # BLAKE2b with 16 bytes of b"1" and b"abc", as two little-endian integers each, from hashlib.
    found, has_id = id_digests(pa.array(["1", "abc", None]))
    assert found.dtype == np.int64
    assert found.tolist() == [ONE, ABC, [0, 0]]
    assert has_id.tolist() == [True, True, False]
    assert id_digests(pa.array([1], pa.uint8()))[0].tolist() == [ONE]
    assert id_digests(pa.array([], pa.string()))[0].shape == (0, 2)


def test_the_hash_of_an_id_is_the_first_half_of_its_digest():
    found, has_id = id_hashes(pa.array(["1", None, "abc", ""]))
    assert found.tolist() == [ONE[0], 0, ABC[0], 0]
    assert has_id.tolist() == [True, False, True, False]
    assert found.flags.c_contiguous


# ---- rows


def test_row_hashes_are_frozen():
    table = stars(1)
    table = table.set_column(3, "parallax", pa.array([5.25]))
    for label in ("panstarrs_g", "panstarrs_r", "panstarrs_i"):
        table = with_column(table, label, [1000.5])
        table = with_column(table, f"{label}_error", [2.5])
    units = b'[[["nJy", false, false], ["nJy", false, false], ["nJy", false, false]], "mas", null]'
    values = struct.pack("<8d", *[1000.5, 2.5] * 3, 5.25, 0.1)
    person = hashlib.blake2b(units, digest_size=16).digest()
    digest = hashlib.blake2b(values + b"1", digest_size=8, person=person).digest()
    assert hashes(table) == list(struct.unpack("<q", digest))


@given(st.lists(st.tuples(FLOATS32, FLOATS32), min_size=1, max_size=5))
def test_float32_hashes_as_its_float64_copy(pairs):
    table = stars(len(pairs))
    flux, error = (pa.array(values, pa.float32()) for values in zip(*pairs, strict=True))
    narrow = with_column(with_column(table, "panstarrs_g", flux), "panstarrs_g_error", error)
    wide = with_column(narrow, "panstarrs_g", flux.cast(pa.float64()))
    wide = with_column(wide, "panstarrs_g_error", error.cast(pa.float64()))
    assert hashes(narrow) == hashes(wide)


@given(st.permutations(range(6)), st.lists(st.integers(0, 6), max_size=3).map(sorted))
def test_a_row_hashes_alike_wherever_it_stands(order, cuts):
    table = stars(6)
    expected = hashes(table)
    shuffled = table.take(pa.array(order))
    edges = [0, *cuts, 6]
    pieces = [shuffled.slice(a, b - a) for a, b in itertools.pairwise(edges)]
    assert hashes(pa.concat_tables(pieces)) == [expected[k] for k in order]
    assert hashes(table.select(table.column_names[::-1])) == expected


def test_one_value_for_null_and_nan_and_one_for_zero():
    bits = np.array([0x7FF8000000000001, 0xFFF8000000000000], np.uint64).view(np.float64)
    missing = [pa.array([value], pa.float64()) for value in [None, np.nan, *bits]]
    rows = [with_column(stars(1), "parallax", values) for values in missing]
    assert len({hashes(row)[0] for row in rows}) == 1
    zeros = [with_column(stars(1), "parallax", [value]) for value in (0.0, -0.0)]
    assert hashes(zeros[0]) == hashes(zeros[1])
    assert hashes(zeros[0]) != hashes(rows[0])


def test_integers_and_decimals_hash_as_the_floats_the_fit_sees():
    whole = with_column(stars(2), "panstarrs_g", pa.array([3, None], pa.int32()))
    assert hashes(whole) == hashes(with_column(stars(2), "panstarrs_g", pa.array([3.0, None])))
    huge = with_column(stars(1), "panstarrs_g", pa.array([2**63 - 1], pa.int64()))
    assert hashes(huge) == hashes(with_column(stars(1), "panstarrs_g", [2.0**63]))
    tenth = pa.array(["0.125"]).cast(pa.decimal128(6, 3))
    assert hashes(with_column(stars(1), "panstarrs_g", tenth)) == hashes(with_column(stars(1), "panstarrs_g", [0.125]))


@pytest.mark.parametrize("column", ["star_id", "parallax", "parallax_error", "panstarrs_g", "panstarrs_i_error"])
def test_every_used_value_counts(column):
    table = stars(2)
    changed = with_column(table, column, pa.array([table[column][0].as_py(), 99], table[column].type))
    before, after = hashes(table), hashes(changed)
    assert before[0] == after[0]
    assert before[1] != after[1]


def test_carried_columns_do_not_count():
    carrying = settings_for("/survey", input__carry=["ra", "dec"])
    assert hashes(with_column(stars(2), "ra", [1.0, 2.0]), carrying) == hashes(stars(2))


def test_names_of_columns_do_not_count():
    renamed = stars(2).rename_columns({"panstarrs_g": "flux", "star_id": "number"})
    bands = [band("panstarrs_g", value="flux"), band("panstarrs_r"), band("panstarrs_i")]
    settings = settings_for("/survey", input__id="number", input__photometry=bands)
    assert hashes(renamed, settings) == hashes(stars(2))


@pytest.mark.parametrize(
    "changes",
    [
        {"input__photometry": [band("panstarrs_g", unit="uJy"), band("panstarrs_r"), band("panstarrs_i")]},
        {"input__photometry": [band("panstarrs_r"), band("panstarrs_g"), band("panstarrs_i")]},
        {"input__parallax__unit": "arcsec"},
        {"input__parallax__zero_point": "dec"},
        {"model__extinction__scale": "dec"},
        {"model__distance__length_scale_pc": "dec"},
        {"input__parallax": None},
    ],
)
def test_units_and_uses_of_columns_count(changes):
    assert hashes(stars(1), settings_for("/survey", **changes)) != hashes(stars(1))


def test_marks_count_and_a_null_mark_is_false():
    bands = [band("panstarrs_g", bad="bad", limit="limit"), band("panstarrs_r"), band("panstarrs_i")]
    settings = settings_for("/survey", input__photometry=bands)

    def hash_of(bad, limit):
        return hashes(with_column(with_column(stars(1), "bad", bad), "limit", limit), settings)[0]

    false, true, null = (pa.array([value], pa.bool_()) for value in (False, True, None))
    assert hash_of(null, false) == hash_of(false, false) == hash_of(pa.array([0], pa.int32()), null)
    assert hash_of(true, false) == hash_of(pa.array([8], pa.int32()), false)
    assert len({hash_of(false, false), hash_of(true, false), hash_of(false, true)}) == 3


def test_marked():
    assert marked(pa.array([True, False, None])).tolist() == [True, False, False]
    chunks = pa.chunked_array([pa.array([0, 3], pa.uint8()), pa.array([None], pa.uint8())])
    assert marked(chunks).tolist() == [False, True, False]


def test_no_rows():
    assert hashes(stars(0)) == []

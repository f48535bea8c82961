"""Hashes of ids and of the values a fit uses, the same on every machine and however the values are stored."""

from __future__ import annotations

import hashlib
import json

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from starkiln.settings import Settings

_ROW_HASH_BYTES = 8


def canonical_ids(ids: pa.Array | pa.ChunkedArray) -> list[bytes | None]:
    """Return each id as bytes: the decimal text of an integer, the UTF-8 of a string; None for null or "".

    Integers are turned into text by Arrow, so 64-bit ids next to nulls stay exact.
    """
    kind = ids.type.value_type if pa.types.is_dictionary(ids.type) else ids.type
    texts = ids.cast(kind).cast(pa.string())
    return pc.if_else(pc.equal(texts, ""), None, texts).cast(pa.binary()).to_pylist()


def id_digests(ids: pa.Array | pa.ChunkedArray) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Return the 128-bit digest of each id as two integers, (n, 2), and whether the row has an id (0 where not).

    Among n ids, two share a digest with a chance of n**2 / 2**129: 1e-21 for a billion (the birthday bound).
    """
    canonical = canonical_ids(ids)
    has_id = np.array([star_id is not None for star_id in canonical], bool)
    digests = np.frombuffer(b"".join(id_digest(star_id or b"") for star_id in canonical), "<i8").reshape(-1, 2)
    return np.where(has_id[:, None], digests, 0).astype(np.int64), has_id


def id_digest(star_id: bytes) -> bytes:
    """Return the 16 bytes that stand for an id: its BLAKE2b digest of that size."""
    return hashlib.blake2b(star_id, digest_size=16).digest()


def id_hashes(ids: pa.Array | pa.ChunkedArray) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Return the first half of each id's digest, and whether the row has an id (0 where not)."""
    digests, has_id = id_digests(ids)
    return np.ascontiguousarray(digests[:, 0]), has_id


def row_hashes(table: pa.Table, settings: Settings) -> NDArray[np.int64]:
    """Return a 64-bit hash of what each row gives the fit: its id, its used values, and their units.

    Values enter as float64, so a column stored as float32 or as integers hashes as its float64 copy does: the
    fit sees the same number. Null and NaN are one value, 0.0 and -0.0 another; a null mark is False. Names of
    columns and carried columns do not enter.

    Parameters
    ----------
    table
        n rows with the columns that the settings use.
    settings
        Say which columns those are, and their units.

    Returns
    -------
    (n,) int64.
    """
    values = [canonical_float64(table[name]) for name in value_columns(settings)]
    marks = [marked(table[name]) for name in mark_columns(settings)]
    rows = np.empty((table.num_rows, 8 * len(values) + len(marks)), np.uint8)
    for k, column in enumerate(values):
        rows[:, 8 * k : 8 * k + 8] = column.astype("<f8").view(np.uint8).reshape(-1, 8)
    for k, mark in enumerate(marks, start=8 * len(values)):
        rows[:, k] = mark
    person = hashlib.blake2b(json.dumps(value_units(settings)).encode(), digest_size=16).digest()
    return _digests(rows, canonical_ids(table[settings.input.id]), person)


def _digests(rows: NDArray[np.uint8], ids: list[bytes | None], person: bytes) -> NDArray[np.int64]:
    base = hashlib.blake2b(digest_size=_ROW_HASH_BYTES, person=person)
    width, everything = rows.shape[1], rows.tobytes()
    digests = bytearray()
    for k, star_id in enumerate(ids):
        digest = base.copy()
        digest.update(everything[k * width : (k + 1) * width] + (star_id or b""))
        digests += digest.digest()
    return np.frombuffer(bytes(digests), "<i8").astype(np.int64)


def canonical_float64(column: pa.Array | pa.ChunkedArray) -> NDArray[np.float64]:
    """Return numbers as a fresh float64 array with one bit pattern for null and NaN, and one for zero."""
    values = float64_values(column)
    values[np.isnan(values)] = np.nan
    return values + 0.0


def float64_values(column: pa.Array | pa.ChunkedArray) -> NDArray[np.float64]:
    """Return numbers as a fresh float64 array, NaN where null."""
    # safe=False: an integer above 2**53 rounds to the nearest double instead of raising.
    filled = column.cast(pa.float64(), safe=False).fill_null(np.nan)
    return np.array(filled.to_numpy(), np.float64)


def marked(column: pa.Array | pa.ChunkedArray) -> NDArray[np.bool_]:
    """Return a column of marks as bools: True, or a number other than 0; a null is False."""
    if not pa.types.is_boolean(column.type):
        column = pc.not_equal(column, pa.scalar(0, column.type))
    return np.array(column.fill_null(False).to_numpy(zero_copy_only=False), bool)


def value_columns(settings: Settings) -> list[str]:
    """Return the columns of numbers a fit uses, in settings order; one used twice is there twice."""
    model, data = settings.model, settings.input
    columns: list[float | str] = []
    for band in data.photometry:
        columns += [band.value, band.error]
    if data.parallax is not None:
        columns += [
            data.parallax.value,
            data.parallax.error,
            data.parallax.zero_point,
            data.parallax.error_scale,
        ]
    if data.distance is not None:
        columns += [data.distance.value, data.distance.error]
    columns += [model.extinction.mean, model.extinction.scale, model.distance.length_scale_pc]
    return [column for column in columns if isinstance(column, str)]


def mark_columns(settings: Settings) -> list[str]:
    """Return the columns of marks a fit uses (bad and limit), in the order of the settings."""
    columns = [column for band in settings.input.photometry for column in (band.bad, band.limit)]
    return [column for column in columns if column is not None]


def value_units(settings: Settings) -> list[object]:
    """Return the meaning of the values in order: units, and which marks each band has."""
    data = settings.input
    bands = [[band.unit, band.bad is not None, band.limit is not None] for band in data.photometry]
    others = [column.unit if column is not None else None for column in (data.parallax, data.distance)]
    return [bands, *others]

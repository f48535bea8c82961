"""Ids that come more than once: the first copy is fitted, later ones are rejected."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starkiln.tables.hashes import id_digests

__all__ = ["RECORD", "copies", "id_digests", "mark_repeats"]

RECORD = np.dtype([("id_hash", "<i8"), ("more_hash", "<i8"), ("row_hash", "<i8"), ("row", "<i8")])
"""What is remembered of a row: the two halves of its id's digest, the hash of its values, and its place."""


def mark_repeats(digests: NDArray[np.int64], rows: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return 2 * row for the first copy and 2 * row + 1 for each later copy of a repeated id, ascending.

    Parameters
    ----------
    digests
        (n, 2), as `id_digests` gives them.
    rows
        (n,), places of the rows.
    """
    order = np.lexsort((rows, digests[:, 1], digests[:, 0]))
    digests, rows = digests[order], rows[order]
    later, repeated = np.zeros(len(rows), bool), np.zeros(len(rows), bool)
    later[1:] = repeated[:-1] = (digests[1:] == digests[:-1]).all(axis=1)
    repeated |= later
    return np.sort(2 * rows[repeated] + later[repeated])


def copies(marks: NDArray[np.int64], rows: NDArray[np.int64]) -> NDArray[np.int8]:
    """Return 0 for rows whose id is unique, 1 for the first copy of a repeated one, 2 for later copies.

    Parameters
    ----------
    marks
        What `mark_repeats` returned.
    rows
        Places of the rows, ascending.
    """
    first, after = np.searchsorted(marks, 2 * rows), np.searchsorted(marks, 2 * rows + 2)
    copy = np.zeros(len(rows), np.int8)
    copy[after > first] = 1 + (marks[first[after > first]] & 1)
    return copy

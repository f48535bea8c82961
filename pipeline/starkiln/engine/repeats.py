"""Ids that come more than once: the first copy is fitted, later ones are rejected."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starkiln.engine.disk import disk_trouble
from starkiln.tables.hashes import id_digests

__all__ = ["copies", "id_digests", "mark_repeats", "read_marks", "write_marks"]

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


def write_marks(marks: NDArray[np.int64], folder: Path, number: int) -> None:
    """Write marks that `mark_repeats` returned as a file of a number of its own."""
    path = folder / f"{number:06d}.npy"
    with disk_trouble(path):
        np.save(path, marks)


def read_marks(folder: Path, first_row: int, last_row: int) -> NDArray[np.int64]:
    """Return the marks, ascending, of the rows from `first_row` to before `last_row`.

    Parameters
    ----------
    folder
        The folder of the files of `write_marks`.
    first_row, last_row
        Places of rows, counted through all files.
    """
    found = []
    for path in sorted(folder.glob("*.npy")):
        with disk_trouble(path):
            marks = np.load(path, mmap_mode="r")
        low, high = np.searchsorted(marks, [2 * first_row, 2 * last_row])
        found.append(np.array(marks[low:high]))
    return np.sort(np.concatenate([np.zeros(0, np.int64), *found]))

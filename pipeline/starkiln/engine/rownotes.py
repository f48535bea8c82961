"""Notes about rows that are not simply fitted: copies of an id, and rows whose results are taken from earlier ones.

Planning writes them, the tasks that read the rows look them up. Rows without a note are fitted.
"""

from __future__ import annotations

import hashlib
import io
import os
from bisect import bisect_left
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starkiln.engine.disk import disk_trouble

NOTE = np.dtype([("row", "<i8"), ("copy", "i1"), ("source", "<i4"), ("source_row", "<i8")])
"""The row, counted through all files; 1 for the first copy of a repeated id, 2 for a later one, else 0; the file of
earlier results that holds the row's result, counted from `Plan.earlier`, and the row there; -1 where there is none."""


def write_notes(notes: NDArray[np.void], folder: Path, number: int) -> tuple[str, str]:
    """Write notes, ascending by row, as a file of a number of its own; return its name and its SHA-256."""
    path = folder / f"{number:06d}.npy"
    buffer = io.BytesIO()
    np.save(buffer, notes)
    with disk_trouble(path), path.open("wb") as file:
        file.write(buffer.getbuffer())
        file.flush()
        os.fsync(file.fileno())
    return path.name, hashlib.sha256(buffer.getbuffer()).hexdigest()


def read_notes(folder: Path, first_row: int, last_row: int) -> NDArray[np.void]:
    """Return the notes, ascending by row, on rows from `first_row` to before `last_row`.

    Parameters
    ----------
    folder
        The folder of the files of `write_notes`.
    first_row, last_row
        Places of rows, counted through all files.
    """
    found = [np.empty(0, NOTE)]
    for path in sorted(folder.glob("*.npy")):
        with disk_trouble(path):
            # A file of no notes cannot be mapped, and is never written.
            notes = np.load(path, mmap_mode="r", allow_pickle=False)
        # Bisected by hand: numpy would first copy the column of all rows.
        low, high = (bisect_left(range(len(notes)), row, key=notes["row"].__getitem__) for row in (first_row, last_row))
        found.append(np.array(notes[low:high]))
    notes = np.concatenate(found)
    return notes[np.argsort(notes["row"])]


def note_columns(notes: NDArray[np.void], rows: NDArray[np.int64]) -> dict[str, NDArray[np.generic]]:
    """Return what notes say of rows, as columns to stand beside theirs.

    Parameters
    ----------
    notes
        What `read_notes` returned for a range of rows.
    rows
        Places of some rows in that range.

    Returns
    -------
    `_duplicate` (0, or 1 for the first copy of a repeated id and 2 for later ones), `_source` and `_source_row`
    (-1 where the row is to be fitted).
    """
    place = np.searchsorted(np.ascontiguousarray(notes["row"]), rows)
    noted = place < len(notes)
    noted[noted] = notes["row"][place[noted]] == rows[noted]
    columns: dict[str, NDArray[np.generic]] = {
        "_duplicate": np.zeros(len(rows), np.int8),
        "_source": np.full(len(rows), -1, np.int32),
        "_source_row": np.full(len(rows), -1, np.int64),
    }
    for name, field in (("_duplicate", "copy"), ("_source", "source"), ("_source_row", "source_row")):
        columns[name][noted] = notes[field][place[noted]]
    return columns

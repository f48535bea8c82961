"""Beside earlier results: which rows are new, changed, gone or reusable."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starkiln.engine.records import RowCounts
from starkiln.engine.repeats import copies, mark_repeats
from starkiln.engine.rownotes import NOTE

OLD = np.dtype(
    [
        ("id_hash", "<i8"),
        ("row_hash", "<i8"),
        ("source", "<i4"),
        ("row", "<i8"),
        ("kind", "i1"),
        ("published", "i1"),
    ]
)
"""A row of earlier results: the hashes of its id and of its values, the number of the file of its result (the lower,
the newer) and the row there, what became of it, and whether it was published."""

CATALOGUE, DATA, FAULT, STALE = range(4)
"""What became of a row: fitted; rejected for its data, or for a fault; or done in a way that no longer holds."""


def join_bucket(
    new: NDArray[np.void], old: NDArray[np.void], *, retry_failed: bool
) -> tuple[NDArray[np.void], RowCounts]:
    """Compare rows of the input with earlier results of the same range of `id_hash`.

    Parameters
    ----------
    new
        Records of selected rows that have an id.
    old
        Records of earlier results.
    retry_failed
        Whether rows that a fault had set aside are tried again.

    Returns
    -------
    Notes, ascending by row, about copies of an id and about rows whose results are taken over; and the counts,
    all but that of rows without an id.
    """
    new = new[np.argsort(new["row"])]
    copy = copies(mark_repeats(np.stack([new["id_hash"], new["more_hash"]], axis=1), new["row"]), new["row"])
    old = old[np.lexsort((old["source"], old["id_hash"]))]
    match, known, there = _matches(new, old)
    match[copy == 2] = -1
    kind = np.full(len(new), -1, np.int8)
    kind[match >= 0] = old["kind"][match[match >= 0]]
    taken = (kind == CATALOGUE) | ((kind == FAULT) & (not retry_failed))
    to_fit = (kind < 0) & (copy != 2)
    counts = RowCounts(
        new=_count(to_fit & ~known),
        changed=_count(to_fit & known),
        kept=_count((kind == CATALOGUE) | (kind == DATA)),
        failed=0 if retry_failed else _count(kind == FAULT),
        retried=_count(kind == FAULT) if retry_failed else 0,
        duplicate=_count(copy == 2),
        gone=_count((old["published"] == 1) & ~there),
    )
    notes = np.empty(len(new), NOTE)
    notes["row"], notes["copy"], notes["source"], notes["source_row"] = new["row"], copy, -1, -1
    notes["source"][taken] = old["source"][match[taken]]
    notes["source_row"][taken] = old["row"][match[taken]]
    return notes[taken | (copy != 0)], counts


def _count(mask: NDArray[np.bool_]) -> int:
    return int(np.count_nonzero(mask))


def _matches(
    new: NDArray[np.void], old: NDArray[np.void]
) -> tuple[NDArray[np.int64], NDArray[np.bool_], NDArray[np.bool_]]:
    """Look rows up among earlier results, ordered by `id_hash` and then the newest first.

    Returns
    -------
    Each row's newest usable result, as a place in `old` or -1; whether its id was published; and of each earlier
    result whether its id is still there.
    """
    # Columns of their own: searching a field of records would first copy it anyway.
    ids, row_hashes, kinds, published = (old[name].copy() for name in ("id_hash", "row_hash", "kind", "published"))
    match, known, there = np.full(len(new), -1, np.int64), np.zeros(len(new), bool), np.zeros(len(old), bool)
    place, end = _ranges(ids, new["id_hash"].copy())
    row = np.flatnonzero(place < end)
    while len(row):
        here = place[row]
        there[here] = True
        known[row] |= published[here] == 1
        found = (match[row] < 0) & (kinds[here] != STALE) & (row_hashes[here] == new["row_hash"][row])
        match[row[found]] = here[found]
        place[row] += 1
        row = row[place[row] < end[row]]
    return match, known, there


def _ranges(ids: NDArray[np.int64], wanted: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return where each wanted id begins and ends among ascending ids."""
    # In ascending order the search stays near its last place in memory, and is several times as fast.
    order = np.argsort(wanted, kind="stable")
    first, last = np.empty(len(wanted), np.int64), np.empty(len(wanted), np.int64)
    first[order] = np.searchsorted(ids, wanted[order])
    last[order] = np.searchsorted(ids, wanted[order], side="right")
    return first, last

from collections import Counter
from dataclasses import asdict

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from starkiln.engine.join import CATALOGUE, DATA, FAULT, OLD, STALE, join_bucket
from starkiln.engine.repeats import RECORD

IDS, VALUES = st.integers(1, 6), st.integers(0, 2)
NEW = st.lists(st.tuples(IDS, VALUES), max_size=12)
RESULTS = st.dictionaries(IDS, st.tuples(VALUES, st.sampled_from([CATALOGUE, DATA, FAULT])), max_size=6)
"""One set of earlier results: of each id, the values it had and what became of it."""


def new_records(rows):
    return np.array([(star % 4, star, 100 * star + value, 10 * row) for row, (star, value) in enumerate(rows)], RECORD)


def old_records(sources, stale=False):
    return np.array(
        [
            (star % 4, 100 * star + value, number, star, STALE if stale else kind, number == len(sources) - 1)
            for number, results in enumerate(sources)
            for star, (value, kind) in results.items()
        ],
        OLD,
    )


def expected(rows, sources, retry_failed):
    """The notes and counts by looking up one row after the other; hashes of ids collide beyond 4."""
    counts, notes, seen = Counter(), [], set()
    published = {star % 4 for star in sources[-1]}
    for row, (star, value) in enumerate(rows):
        copy = 2 if star in seen else int([other for other, _ in rows].count(star) > 1)
        seen.add(star)
        found = [(n, results[star][1]) for n, results in enumerate(sources) if results.get(star, (None,))[0] == value]
        source = -1
        if copy == 2:
            counts["duplicate"] += 1
        elif not found:
            counts["changed" if star % 4 in published else "new"] += 1
        elif found[0][1] == FAULT:
            counts["retried" if retry_failed else "failed"] += 1
            source = -1 if retry_failed else found[0][0]
        else:
            counts["kept"] += 1
            source = found[0][0] if found[0][1] == CATALOGUE else -1
        if copy or source >= 0:
            notes.append((10 * row, copy, source, star if source >= 0 else -1))
    counts["gone"] = sum(star % 4 not in {other % 4 for other, _ in rows} for star in sources[-1])
    return notes, counts


@given(rows=NEW, sources=st.lists(RESULTS, min_size=1, max_size=3), retry_failed=st.booleans(), order=st.randoms())
def test_rows_are_joined_as_one_would_look_them_up_one_by_one(rows, sources, retry_failed, order):
    new, old = new_records(rows), old_records(sources)
    new, old = (records[order.sample(range(len(records)), len(records))] for records in (new, old))
    notes, counts = join_bucket(new, old, retry_failed=retry_failed)
    expected_notes, expected_counts = expected(rows, sources, retry_failed)
    assert notes.tolist() == expected_notes
    assert {name: count for name, count in asdict(counts).items() if count} == +expected_counts
    assert sum(expected_counts.values()) - expected_counts["gone"] == len(rows)


@given(rows=NEW, results=RESULTS)
def test_stale_results_are_never_taken_but_tell_new_rows_from_changed_ones(rows, results):
    notes, counts = join_bucket(new_records(rows), old_records([results], stale=True), retry_failed=False)
    assert (notes["source"] == -1).all()
    ids = {star for star, _ in rows}
    published = {star % 4 for star in results}
    assert counts.kept == counts.failed == counts.retried == 0
    assert (counts.new, counts.changed) == (
        sum(star % 4 not in published for star in ids),
        sum(star % 4 in published for star in ids),
    )


@pytest.mark.parametrize("retry_failed", [False, True])
def test_nothing_is_joined_with_nothing(retry_failed):
    notes, counts = join_bucket(np.empty(0, RECORD), np.empty(0, OLD), retry_failed=retry_failed)
    assert len(notes) == sum(asdict(counts).values()) == 0

import hashlib

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from starkiln.engine.rownotes import NOTE, note_columns, read_notes, write_notes
from starkiln.errors import EnvironmentTrouble


def notes_on(rows):
    return np.array([(row, row % 3, row % 5 - 1, 10 * row) for row in rows], NOTE)


@given(
    rows=st.sets(st.integers(0, 60)),
    first=st.integers(0, 60),
    span=st.integers(0, 60),
    files=st.integers(1, 4),
)
def test_notes_of_a_range_are_found_in_all_files(tmp_path_factory, rows, first, span, files):
    folder = tmp_path_factory.mktemp("notes")
    for number in range(files):
        here = sorted(row for row in rows if row % files == number)
        if here:
            write_notes(notes_on(here), folder, number)
    found = read_notes(folder, first, first + span)
    assert found.tolist() == notes_on(sorted(row for row in rows if first <= row < first + span)).tolist()
    assert found.dtype == NOTE


@given(rows=st.sets(st.integers(0, 40)), asked=st.sets(st.integers(0, 40)))
def test_columns_hold_what_is_noted_and_fillers_elsewhere(rows, asked):
    asked = sorted(asked)
    columns = note_columns(notes_on(sorted(rows)), np.array(asked, np.int64))
    expected = [(row % 3, row % 5 - 1, 10 * row) if row in rows else (0, -1, -1) for row in asked]
    assert list(zip(*(columns[name].tolist() for name in columns), strict=True)) == expected
    assert list(columns) == ["_duplicate", "_source", "_source_row"]
    assert [column.dtype for column in columns.values()] == [np.int8, np.int32, np.int64]


def test_the_digest_is_that_of_the_file(tmp_path):
    name, sha256 = write_notes(notes_on([3, 4]), tmp_path, 7)
    assert name == "000007.npy"
    assert sha256 == hashlib.sha256((tmp_path / name).read_bytes()).hexdigest()


def test_a_folder_that_cannot_be_written_is_trouble_that_names_the_file(tmp_path):
    with pytest.raises(EnvironmentTrouble, match=r"gone/000000\.npy"):
        write_notes(notes_on([1]), tmp_path / "gone", 0)

import os

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st

from small_survey import settings_for, stars, with_column
from starkiln.engine.plan import (
    even_parts,
    file_stamp,
    make_plan,
    rows_per_part,
)
from starkiln.engine.repeats import copies, read_marks
from starkiln.errors import EnvironmentTrouble, InputError
from starkiln.tables import hashes
from starkiln.tables.source import open_source


def plan_of(tmp_path, tables, row_group_size=30, workers=1, **changes):
    """Write tables as files a, b, ... and return their source and plan."""
    folder, scratch = tmp_path / "input", tmp_path / "scratch"
    folder.mkdir()
    scratch.mkdir()
    for name, table in zip("abcdefgh", tables, strict=False):
        pq.write_table(table, folder / f"{name}.parquet", row_group_size=row_group_size)
    settings = settings_for(folder, **changes)
    source = open_source(settings)
    return source, make_plan(source, settings, workers, scratch)


@given(rows=st.integers(0, 10_000), most=st.integers(1, 3000))
def test_parts_are_as_few_and_as_even_as_can_be(rows, most):
    parts = even_parts(rows, most)
    assert sum(parts) == rows
    assert len(parts) == -(-rows // most)
    assert not parts or max(parts) - min(parts) <= 1


def test_parts_shrink_to_keep_workers_busy_but_not_to_crumbs():
    assert rows_per_part(1_000_000, workers=2, most=5000) == 5000
    assert rows_per_part(8000, workers=2, most=5000) == 1000
    assert rows_per_part(300, workers=8, most=5000) == 250
    assert rows_per_part(300, workers=8, most=40) == 40


@pytest.mark.parametrize("row_group_size", [1, 7, 30, 1000])
@pytest.mark.parametrize("part_rows", [1, 40, 1000])
def test_units_cover_every_selected_row_once_in_order(tmp_path, row_group_size, part_rows):
    tables = [stars(50, 1), stars(1, 51), stars(60, 52)]
    changes = {"compute__rows_per_part": part_rows, "input__where": [["star_id", ">", 20]]}
    source, plan = plan_of(tmp_path, tables, row_group_size, **changes)
    assert (plan.read, plan.selected) == (111, 91)
    pieces = [piece for unit in plan.units for piece in unit.pieces]
    assert pieces == sorted(set(pieces))
    assert sum(source.files[file].row_group_rows[group] for file, group in pieces) >= 91
    assert [unit.number for unit in plan.units] == list(range(len(plan.units)))
    first_part = 0
    for unit in plan.units:
        assert sum(unit.part_rows) == unit.selected > 0
        assert unit.first_part == first_part
        assert max(unit.part_rows) <= part_rows
        first_part += len(unit.part_rows)
    assert sum(unit.selected for unit in plan.units) == 91
    assert plan.parts == first_part


def test_small_row_groups_are_gathered_and_a_big_one_is_cut(tmp_path):
    _, gathered = plan_of(tmp_path, [stars(100)], 10, compute__rows_per_part=40)
    assert [len(unit.pieces) for unit in gathered.units] == [4, 4, 2]
    assert [unit.part_rows for unit in gathered.units] == [(40,), (40,), (20,)]
    other = tmp_path / "other"
    other.mkdir()
    _, cut = plan_of(other, [stars(100)], 1000, compute__rows_per_part=40)
    assert [unit.part_rows for unit in cut.units] == [(33, 33, 34)]


def test_repeated_ids_are_found_across_files_and_rows_without_id_are_not_repeats(tmp_path):
    ids = [[5, None, 7], [None, 5, 5, 8]]
    tables = [with_column(stars(len(some)), "star_id", pa.array(some, pa.int64())) for some in ids]
    _, plan = plan_of(tmp_path, tables)
    assert plan.duplicates == 2
    marks = read_marks(tmp_path / "scratch" / "marks", 0, 7)
    assert copies(marks, np.arange(7)).tolist() == [1, 0, 0, 0, 2, 2, 0]
    assert copies(read_marks(tmp_path / "scratch" / "marks", 3, 5), np.arange(3, 5)).tolist() == [0, 2]


def test_a_copy_that_the_filters_turn_away_is_no_copy(tmp_path):
    table = with_column(stars(4), "star_id", [1, 2, 1, 3])
    table = with_column(table, "field", ["A", "A", "B", "A"])
    _, plan = plan_of(tmp_path, [table], input__where=[["field", "=", "A"]])
    assert (plan.selected, plan.duplicates) == (3, 0)


def test_hive_layout_keeps_partitions_apart(tmp_path):
    folder = tmp_path / "input"
    for field, first in (("T1", 1), ("T2", 31)):
        (folder / f"field={field}").mkdir(parents=True)
        pq.write_table(stars(30, first), folder / f"field={field}" / "a.parquet")
    settings = settings_for(folder, output__layout="hive")
    scratch = tmp_path / "scratch"
    scratch.mkdir()
    plan = make_plan(open_source(settings), settings, 1, scratch)
    assert [(unit.folder, unit.part_rows) for unit in plan.units] == [
        ("field=T1", (30,)),
        ("field=T2", (30,)),
    ]


def test_filters_that_leave_nothing_are_an_error_that_names_them(tmp_path):
    with pytest.raises(InputError, match=r"input\.where and input\.only leave none of the 10 rows"):
        plan_of(tmp_path, [stars(10)], input__where=[["star_id", ">", 10]])


def test_planning_calls_back_between_batches_with_all_rows_read(tmp_path):
    calls = []
    source, _ = plan_of(tmp_path, [stars(100)], 30)
    scratch = tmp_path / "again"
    scratch.mkdir()
    settings = settings_for(tmp_path / "input", input__where=[["star_id", "<", 10]])
    make_plan(source, settings, 1, scratch, calls.append)
    assert sum(calls) == 100


def test_a_file_that_is_gone_is_trouble_that_names_it(tmp_path):
    with pytest.raises(EnvironmentTrouble, match=r"gone\.parquet: No such file"):
        file_stamp(tmp_path / "gone.parquet")


def test_stamps_tell_size_and_time_of_each_file(tmp_path):
    source, plan = plan_of(tmp_path, [stars(3), stars(4, 4)])
    paths = [file.path for file in source.files]
    assert plan.stamps == tuple((os.stat(path).st_size, os.stat(path).st_mtime_ns) for path in paths)


def test_ids_whose_hashes_agree_in_half_their_bits_are_no_repeats(tmp_path, monkeypatch):
    monkeypatch.setattr(hashes, "id_digest", lambda star_id: b"the same" + star_id.rjust(8))
    tables = [with_column(stars(3), "star_id", ids) for ids in ([5, 6, 7], [8, 6, 9])]
    _, plan = plan_of(tmp_path, tables)
    assert plan.duplicates == 1
    assert copies(read_marks(tmp_path / "scratch" / "marks", 0, 6), np.arange(6)).tolist() == [0, 1, 0, 0, 2, 0]

import json
import os
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planning import Remembered, planned, written
from small_survey import settings_for, stars, with_column
from starkiln.engine import hashing
from starkiln.engine.plan import even_parts, file_stamp, load_plan, rows_per_part, save_plan
from starkiln.engine.records import EarlierFile
from starkiln.engine.rownotes import note_columns, read_notes
from starkiln.engine.stopping import RunStopped
from starkiln.errors import EnvironmentTrouble, InputError
from starkiln.tables import hashes
from starkiln.tables.source import open_source


def plan_of(tmp_path, tables, row_group_size=30, workers=1, **changes):
    """Write tables as files a, b, ... and return their source and plan."""
    source, settings = written(tmp_path / "input", tables, row_group_size, **changes)
    return source, planned(tmp_path, source, settings, workers)


def copies_in(tmp_path, first, last):
    rows = np.arange(first, last)
    return note_columns(read_notes(tmp_path / "plan" / "notes", first, last), rows)["_duplicate"].tolist()


@given(rows=st.integers(0, 10_000), most=st.integers(1, 3000))
def test_parts_are_as_few_and_as_even_as_can_be(rows, most):
    parts = even_parts(rows, most)
    assert sum(parts) == rows
    assert len(parts) == -(-rows // most)
    assert not parts or max(parts) - min(parts) <= 1


def test_parts_shrink_to_keep_workers_busy_but_not_to_crumbs():
    assert rows_per_part(1_000_000, 1_000_000, workers=2, most=5000) == 5000
    assert rows_per_part(8000, 8000, workers=2, most=5000) == 1000
    assert rows_per_part(300, 300, workers=8, most=5000) == 250
    assert rows_per_part(300, 300, workers=8, most=40) == 40


def test_parts_grow_where_most_rows_are_taken_over_but_not_beyond_a_bound():
    assert rows_per_part(1_000_000, 500_000, workers=2, most=5000) == 10_000
    assert rows_per_part(1_000_000, 10, workers=2, most=5000) == 50_000
    assert rows_per_part(1_000_000, 0, workers=2, most=5000) == 50_000
    assert rows_per_part(200_000, 1780, workers=2, most=5000) == 25_000
    assert rows_per_part(1_000_000, 10, workers=2, most=60_000) == 60_000


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
    assert plan.rows.without_id == 2
    assert copies_in(tmp_path, 0, 7) == [1, 0, 0, 0, 2, 2, 0]
    assert copies_in(tmp_path, 3, 5) == [0, 2]


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
    plan = planned(tmp_path, open_source(settings), settings)
    assert [(unit.folder, unit.part_rows) for unit in plan.units] == [
        ("field=T1", (30,)),
        ("field=T2", (30,)),
    ]


def test_filters_that_leave_nothing_are_an_error_that_names_them(tmp_path):
    with pytest.raises(InputError, match=r"input\.where and input\.only leave none of the 10 rows"):
        plan_of(tmp_path, [stars(10)], input__where=[["star_id", ">", 10]])


def test_planning_calls_back_between_batches_with_all_rows_read(tmp_path):
    calls, files, checkpoints = [], [], Remembered()
    tables = [stars(100), stars(20, 101)]
    source, settings = written(tmp_path / "input", tables, input__where=[["star_id", "<", 110]])
    options = {"between": calls.append, "on_file": lambda *told: files.append(told), "checkpoints": checkpoints}
    plan = planned(tmp_path, source, settings, **options)
    assert (sum(calls), plan.read, plan.selected) == (120, 120, 109)
    assert [(file.name, file.rows, fresh) for file, fresh in files] == [
        ("a.parquet", 100, True),
        ("b.parquet", 20, True),
    ]
    assert planned(tmp_path, source, settings, **options) == plan
    assert sum(calls) == 240
    assert [fresh for _, fresh in files] == [True, True, False, False]


def test_a_plan_that_was_stopped_goes_on_with_the_next_file(tmp_path):
    class Stopped(Exception):
        pass

    read, checkpoints = [], Remembered()
    source, settings = written(tmp_path / "input", [stars(50, 50 * k + 1) for k in range(4)], 50)

    def stop_in_third(rows):
        read.append(rows)
        if len(read) == 3:
            raise Stopped

    with pytest.raises(Stopped):
        planned(tmp_path, source, settings, checkpoints=checkpoints, between=stop_in_third)
    assert [file.name for file in checkpoints.files.values()] == ["a.parquet", "b.parquet"]
    assert len(list((tmp_path / "planning").iterdir())) == 2
    again = []
    plan = planned(tmp_path, source, settings, checkpoints=checkpoints, on_file=lambda file, fresh: again.append(fresh))
    assert again == [False, False, True, True]
    assert plan == planned(tmp_path / "other", source, settings)


def test_records_that_are_damaged_are_made_anew(tmp_path):
    checkpoints, again = Remembered(), []
    source, settings = written(tmp_path / "input", [stars(50), stars(50, 51), stars(50, 101)])
    plan = planned(tmp_path, source, settings, checkpoints=checkpoints)
    first, second, _ = (tmp_path / "planning" / f"{key}.bin" for key in checkpoints.files)
    first.write_bytes(first.read_bytes()[:-1] + b"\1")
    second.unlink()
    told = {"checkpoints": checkpoints, "on_file": lambda file, fresh: again.append(fresh)}
    assert planned(tmp_path, source, settings, **told) == plan
    assert again == [True, True, False]


def test_without_time_for_a_file_planning_stops_between_files(tmp_path):
    checkpoints, asked = Remembered(), []
    source, settings = written(tmp_path / "input", [stars(10), stars(50, 11)])

    def may_begin(seconds):
        asked.append(seconds)
        return len(asked) == 1

    with pytest.raises(RunStopped, match="1 of 2 input files"):
        planned(tmp_path, source, settings, checkpoints=checkpoints, may_begin=may_begin)
    assert asked[1] == 5 * asked[0] > 0
    assert len(checkpoints.files) == 1


@pytest.mark.parametrize("batch_rows", [1, 7, 1000])
def test_the_size_of_batches_changes_nothing(tmp_path, monkeypatch, batch_rows):
    table = with_column(stars(60), "name", pa.array(["α", None, "", "bc"] * 15))
    table = with_column(table, "star_id", pa.array([5, None, 7, 5, 8, 9] * 10, pa.int64()))
    source, settings = written(tmp_path / "input", [table, table], 25, input__carry=["ra", "name"])
    plan = planned(tmp_path / "one", source, settings)
    monkeypatch.setattr(hashing, "BATCH_ROWS", batch_rows)
    assert planned(tmp_path / "two", source, settings) == plan
    assert plan.rows.duplicate == 96
    assert plan.content


def test_row_groups_do_not_count_for_the_content_of_an_input(tmp_path):
    tables = [with_column(stars(60), "name", pa.array(["a", None, "bc"] * 20))]
    contents = []
    for size in (7, 60):
        source, settings = written(tmp_path / f"input{size}", tables, size, input__carry=["ra", "name"])
        contents.append(planned(tmp_path / f"{size}", source, settings).content)
    assert contents[0] == contents[1]


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
    assert copies_in(tmp_path, 0, 6) == [0, 1, 0, 0, 2, 0]


def stored(tmp_path):
    tables = [with_column(stars(40), "star_id", [*range(1, 40), 3]), stars(30, 41)]
    _, plan = plan_of(tmp_path, tables, compute__rows_per_part=10, output__layout="hive")
    return plan, save_plan(plan, tmp_path / "plan")


def test_a_stored_plan_comes_back_as_it_was(tmp_path):
    plan, sha256 = stored(tmp_path)
    assert plan.notes
    assert load_plan(tmp_path / "plan", sha256) == plan


def test_a_stored_plan_that_is_damaged_or_another_is_no_plan(tmp_path):
    plan, sha256 = stored(tmp_path)
    place, notes = tmp_path / "plan" / "plan.json", tmp_path / "plan" / "notes" / plan.notes[0][0]
    assert load_plan(tmp_path / "plan", "0" * 64) is None
    whole = notes.read_bytes()
    notes.write_bytes(whole[:-1] + bytes([whole[-1] ^ 1]))
    assert load_plan(tmp_path / "plan", sha256) is None
    notes.unlink()
    assert load_plan(tmp_path / "plan", sha256) is None
    notes.write_bytes(whole)
    assert load_plan(tmp_path / "plan", sha256) == plan
    place.write_text(json.dumps(json.loads(place.read_text())) + " ")
    assert load_plan(tmp_path / "plan", sha256) is None
    place.unlink()
    assert load_plan(tmp_path / "plan", sha256) is None


def test_a_plan_whose_earlier_results_are_gone_is_no_plan(tmp_path):
    plan, _ = stored(tmp_path)
    results = [tmp_path / name for name in ("catalogue.parquet", "draws.parquet")]
    for path in results:
        path.touch()
    plan = replace(plan, earlier=(EarlierFile(results[0], results[1], "catalogue"), EarlierFile(results[0], None, "x")))
    sha256 = save_plan(plan, tmp_path / "plan")
    assert load_plan(tmp_path / "plan", sha256) == plan
    for path in results:
        path.rename(tmp_path / "away")
        assert load_plan(tmp_path / "plan", sha256) is None
        (tmp_path / "away").rename(path)


def test_notes_of_an_earlier_attempt_are_removed(tmp_path):
    stale = tmp_path / "plan" / "notes" / "000007.npy"
    stale.parent.mkdir(parents=True)
    stale.write_bytes(b"no notes")
    plan_of(tmp_path, [stars(10)])
    assert not stale.exists()

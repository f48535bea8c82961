"""The tasks of a run: parts cut, fitted whole or in pieces, and put together again."""

import itertools
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fake_stages import by_content, lose_a_row, raise_always, raise_at_failing_id
from part_runs import bytes_of, plan_run, rows_of, write_tables
from small_survey import stars, with_column
from starkiln.engine import tasks
from starkiln.engine.audits import unpack_audit
from starkiln.engine.closing import part_path
from starkiln.engine.records import Guard, SetAside
from starkiln.engine.tasks import assemble_part, cut_unit, fit_rows, remove_pieces, set_row_aside
from starkiln.errors import EnvironmentTrouble
from starkiln.inference.audit import AuditSums, no_stars
from starkiln.inference.posterior import Block

ROWS = 24


@pytest.fixture
def table():
    """Stars of which two have no id, and two that of another."""
    ids = [None if row in (3, 20) else row % 19 for row in range(ROWS)]
    return with_column(stars(ROWS), "star_id", pa.array(ids, pa.int64()))


def one_unit(tmp_path, table, process=by_content, part_rows=ROWS, **changes):
    """A planned run of one file, and its only unit."""
    folder = write_tables(tmp_path / "input", {"a.parquet": table})
    run = plan_run(tmp_path / "run", folder, process, part_rows=part_rows, sampling__keep_draws=2, **changes)
    (unit,) = run.plan.units
    return run, unit


def rows_in(path):
    with pa.OSFile(str(path)) as file:
        return pa.ipc.open_file(file).read_all()["_input_row"].to_pylist()


# ---- cutting


def test_a_unit_is_cut_into_its_parts_in_order(tmp_path, table):
    run, unit = one_unit(tmp_path, table, part_rows=10)
    parts = run.cut(unit)
    assert [(part.number, part.rows, part.fits) for part in parts] == [(0, 10, 10), (1, 10, 10), (2, 4, 4)]
    assert [rows_in(part.path) for part in parts] == [[*range(10)], [*range(10, 20)], [*range(20, 24)]]


def test_only_parts_that_are_wanted_are_cut(tmp_path, table):
    run, unit = one_unit(tmp_path, table, part_rows=5, input__where=[["ra", ">", 50.0]])
    row = SetAside(2, "took too long", "")
    parts = cut_unit(run.job, unit, frozenset({1, 3}), {0: (SetAside(1, "", ""),), 3: (row,)}).parts
    assert [(part.number, part.set_aside) for part in parts] == [(1, ()), (3, (row,))]
    selected = np.flatnonzero(table["ra"].to_numpy() > 50.0).tolist()
    assert [rows_in(part.path) for part in parts] == [selected[5:10], selected[15:20]]
    assert len(list(run.job.scratch.iterdir())) == 2


def test_input_that_has_changed_since_the_plan_is_trouble_and_not_damaged(tmp_path, table):
    run, unit = one_unit(tmp_path, table)
    run.job.source.files[0].path.write_bytes(b"PAR1 is being written again")
    with pytest.raises(EnvironmentTrouble, match=r"a\.parquet has changed since the run was planned"):
        run.cut(unit)


def test_input_that_changes_while_it_is_read_is_trouble(tmp_path, table, monkeypatch):
    run, unit = one_unit(tmp_path, table)
    stamps = iter([*run.job.stamps, (1, 1)])
    monkeypatch.setattr(tasks, "file_stamp", lambda path: next(stamps))
    with pytest.raises(EnvironmentTrouble, match=r"a\.parquet has changed since the run was planned"):
        run.cut(unit)


def test_rows_that_the_plan_knows_and_the_input_has_not_are_trouble(tmp_path, table):
    run, unit = one_unit(tmp_path, table, part_rows=10)
    with pytest.raises(EnvironmentTrouble, match="fewer rows than planned in rows 0 to 23"):
        run.cut(replace(unit, part_rows=(10, 10, 5)))


# ---- fitting


def test_a_part_is_written_beside_its_place_and_counted(tmp_path, table):
    run, unit = one_unit(tmp_path, table, part_rows=13)
    part = run.cut(unit)[1]
    fitted = run.fit(part)
    assert (fitted.number, fitted.first, fitted.last, fitted.rows, fitted.fitted) == (1, 0, 11, 11, 11)
    for name, written in fitted.written.items():
        place = part_path(run.job.parts, name, 1)
        assert written.tmp_path.parent == place.parent
        assert written.tmp_path.name.startswith(f".{place.name}.")
        assert written.size == written.tmp_path.stat().st_size
        assert not place.exists()
    assert fitted.reasons == {"duplicate id": 3, "no id": 1}
    assert sum(fitted.reasons.values()) + fitted.written["catalogue"].rows == 11
    assert not list((tmp_path / "run" / "started").iterdir())


def test_a_stage_that_loses_a_row_is_noticed_and_no_mark_stays(tmp_path, table):
    run, unit = one_unit(tmp_path, table, lose_a_row)
    with pytest.raises(RuntimeError, match=r"24 rows went in, .* came out"):
        run.fit(*run.cut(unit))
    assert not list((tmp_path / "run" / "started").iterdir())


def test_the_guard_ends_with_the_task(tmp_path, table):
    run, unit = one_unit(tmp_path, table, raise_at_failing_id)
    (part,) = run.cut(unit)
    guard = Guard(tmp_path / "run" / "started" / "mark", 60.0)
    with pytest.raises(ArithmeticError):
        fit_rows(run.job, part, 0, ROWS, guard)
    assert fit_rows(run.job, part, 14, ROWS, guard).rows == 10


# ---- pieces


@settings(max_examples=15)
@given(cuts=st.sets(st.integers(1, ROWS - 1)), alone=st.sets(st.integers(0, ROWS - 1), max_size=2))
def test_pieces_make_the_part_that_is_fitted_whole(tmp_path_factory, cuts, alone):
    ids = [None if row in (3, 20) else row % 19 for row in range(ROWS)]
    table = with_column(stars(ROWS), "star_id", pa.array(ids, pa.int64()))
    folder = tmp_path_factory.mktemp("pieces")
    run, unit = one_unit(folder, table)
    (part,) = run.cut(unit)
    edges = sorted({0, ROWS, *cuts, *alone, *(row + 1 for row in alone)})
    pieces = tuple(run.fit(part, first, last) for first, last in itertools.pairwise(edges))
    whole, joined = run.fit(part), assemble_part(run.job, part, pieces)
    for name in whole.written:
        assert tables_of(joined)[name].equals(tables_of(whole)[name])
    assert (joined.reasons, joined.flags, joined.fitted) == (whole.reasons, whole.flags, whole.fitted)
    assert all(written.tmp_path.name.startswith(".part-000000.parquet.") for written in joined.written.values())


def test_what_rows_say_of_zero_points_goes_with_them(tmp_path, table):
    run, unit = one_unit(tmp_path, table, with_audit)
    (part,) = run.cut(unit)
    pieces = (run.fit(part, 0, 7), set_row_aside(run.job, part, SetAside(7, "", "")), run.fit(part, 8, ROWS))
    assert unpack_audit(run.fit(part).audit).key.tolist() == [*range(ROWS)]
    assert unpack_audit(assemble_part(run.job, part, pieces).audit).key.tolist() == [*range(7), *range(8, ROWS)]


def with_audit(table, settings, model):
    """Give each row a star of its own in the audit."""
    none, keys = no_stars(3), table["_input_row"].to_numpy().astype(np.uint64)
    columns = (np.zeros((len(keys), *column.shape[1:]), column.dtype) for column in none.block)
    sums = AuditSums(keys, keys > 3, np.zeros((len(keys), none.points.shape[1])), Block(*columns))
    return replace(by_content(table, settings, model), audit=sums)


def tables_of(fitted):
    return {name: pq.read_table(written.tmp_path) for name, written in fitted.written.items()}


def test_a_row_set_aside_is_rejected_for_a_fault_and_its_neighbours_are_as_ever(tmp_path, table):
    run, _ = one_unit(tmp_path, table, part_rows=9)
    undisturbed = plan_run(
        tmp_path / "undisturbed", tmp_path / "input", by_content, part_rows=9, sampling__keep_draws=2
    ).finish()
    set_aside = {0: [SetAside(0, "stage raised", "KeyError: 'x'")], 1: [SetAside(4, "took too long", "45 s")]}
    generation = run.finish(set_aside)
    faults = [row for row in rows_of(generation, "rejected").to_pylist() if row["kind"] == "fault"]
    assert [(row["input_row"], row["reason"], row["detail"]) for row in faults] == [
        (0, "stage raised", "KeyError: 'x'"),
        (13, "took too long", "45 s"),
    ]
    others = rows_of(undisturbed, "catalogue")
    ids = table["star_id"].to_pylist()
    away = [ids[row] for row in (0, 13)]
    expected = others.filter(pa.compute.invert(pa.compute.is_in(others["star_id"], pa.array(away))))
    assert rows_of(generation, "catalogue").equals(expected)
    assert len(rows_of(generation, "draws")) == len(expected)
    assert len(rows_of(generation, "index")) == len(rows_of(undisturbed, "index"))


@pytest.mark.parametrize("row", [3, 19])
def test_no_stage_sees_a_row_set_aside(tmp_path, table, row):
    """Not even one without an id, or a later copy of one: it has no place in the index."""
    run, unit = one_unit(tmp_path, table, raise_always)
    (part,) = run.cut(unit)
    fitted = set_row_aside(run.job, part, SetAside(row, "worker died", "twice"))
    assert (fitted.first, fitted.last, fitted.fitted) == (row, row + 1, 0)
    assert {name: written.rows for name, written in fitted.written.items()} == {
        "catalogue": 0,
        "rejected": 1,
        "draws": 0,
        "index": 0,
    }
    assert fitted.reasons == {"worker died": 1}


@pytest.mark.parametrize("spans", [[(0, 5), (6, 24)], [(0, 5), (4, 24)], [(0, 23)], [(1, 24)]])
def test_pieces_that_do_not_make_a_part_are_refused(tmp_path, table, spans):
    run, unit = one_unit(tmp_path, table)
    (part,) = run.cut(unit)
    pieces = tuple(run.fit(part, *span) for span in spans)
    with pytest.raises(ValueError, match="do not make its 24 rows"):
        assemble_part(run.job, part, pieces)


def test_pieces_are_hidden_files_that_can_be_removed_twice(tmp_path, table):
    run, unit = one_unit(tmp_path, table)
    (part,) = run.cut(unit)
    pieces = [run.fit(part, 0, 5), run.fit(part, 5, 24)]
    names = {path.name[:27] for path in run.job.parts.rglob("*") if path.is_file()}
    assert names == {".piece-000000-000000-000005", ".piece-000000-000005-000024"}
    for _ in range(2):
        remove_pieces(pieces)
        assert not bytes_of(run.job.parts)

"""Results taken over from earlier runs: as if every row had been fitted again."""

import itertools
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fake_stages import by_content, pass_through
from part_runs import bytes_of, plan_run, rows_of, write_tables
from small_survey import stars, with_column
from starkiln.engine.job import fitting_stages
from starkiln.engine.kept import merged, read_places
from starkiln.engine.records import SetAside
from starkiln.errors import EnvironmentTrouble
from starkiln.flags import BY_NAME
from starkiln.stages.model import build_model
from starkiln.tables.write import publish, write_part

KEEP_DRAWS = {"sampling__keep_draws": 2}


def survey(tmp_path, name, table, cuts=(), **options):
    """Write a table, cut into files at some rows, and plan its run."""
    edges = [0, *cuts, len(table)]
    files = {f"{k}.parquet": table.slice(a, b - a) for k, (a, b) in enumerate(itertools.pairwise(edges))}
    return plan_run(tmp_path / name, write_tables(tmp_path / f"{name}-input", files), **options)


def fits(run):
    """Return how many rows of a run are to be fitted."""
    return sum(part.fits for unit in run.plan.units for part in run.cut(unit))


def changed(table, rows, seed=1):
    """The table with other parallaxes in some rows."""
    parallax = table["parallax"].to_numpy().copy()
    parallax[list(rows)] += seed
    return with_column(table, "parallax", parallax)


# ---- reading rows


@pytest.fixture
def numbers(tmp_path, monkeypatch):
    """A file of the numbers from 0 to 99 in row groups of ten."""
    monkeypatch.setattr("starkiln.tables.write.ROW_GROUP_ROWS", 10)
    path = tmp_path / "numbers.parquet"
    publish(write_part(pa.table({"number": np.arange(100)}), path), path)
    return path


@pytest.mark.parametrize("rows", [[0], [99, 0, 50], [7, 7, 6, 7], [19, 20, 9, 10], range(100)])
def test_rows_come_in_the_order_asked_for(numbers, rows):
    assert read_places(numbers, np.array(rows))["number"].to_pylist() == list(rows)


def test_only_the_row_groups_asked_for_are_read(numbers):
    start = pq.read_metadata(numbers).row_group(5).column(0).dictionary_page_offset
    data = bytearray(numbers.read_bytes())
    data[start + 20] ^= 4
    numbers.write_bytes(data)
    assert read_places(numbers, np.array([49, 60]))["number"].to_pylist() == [49, 60]
    with pytest.raises(EnvironmentTrouble, match=r"numbers\.parquet"):
        read_places(numbers, np.array([49, 55]))


@pytest.mark.parametrize("rows", [[100], [3, 4711], [-1]])
def test_a_row_that_is_not_there_is_trouble(numbers, rows):
    with pytest.raises(EnvironmentTrouble, match=r"numbers\.parquet: .* of 100 is wanted; run with --refit-all"):
        read_places(numbers, np.array(rows))


def test_two_tables_are_merged_by_the_places_of_their_rows():
    fresh, kept = pa.table({"name": ["b", "d"]}), pa.table({"name": ["a", "c", "e"]})
    table = merged(fresh, kept, np.array([1, 3]), np.array([0, 2, 4]))
    assert table["name"].to_pylist() == list("abcde")
    assert table["name"].num_chunks == 1


# ---- whole runs


@st.composite
def nights(draw):
    """A table, and the same some nights later: rows changed, gone, repeated, without an id, in another order."""
    rows = draw(st.integers(1, 24))
    table = stars(rows)
    ids = draw(st.lists(st.one_of(st.none(), st.integers(1, 30)), min_size=rows, max_size=rows))
    table = with_column(table, "star_id", pa.array(ids, pa.int64()))
    order = draw(st.lists(st.integers(0, rows - 1), min_size=1, max_size=30))
    later = changed(table.take(pa.array(order)), {row for row in range(len(order)) if draw(st.integers(0, 3)) == 0})
    cuts = sorted(draw(st.sets(st.integers(0, len(order)), max_size=3)))
    return table, later, cuts, draw(st.integers(1, 9))


@settings(max_examples=12, suppress_health_check=[HealthCheck.too_slow])
@given(night=nights())
def test_half_kept_is_like_fitted_whole(tmp_path_factory, night):
    table, later, cuts, part_rows = night
    folder = tmp_path_factory.mktemp("nights")
    before = survey(folder, "before", table, **KEEP_DRAWS).finish()
    options = {"part_rows": part_rows, "input__carry": ["ra"]} | KEEP_DRAWS
    after = survey(folder, "after", later, cuts, earlier=[before], **options)
    fresh = survey(folder, "fresh", later, cuts, **options)
    assert fits(after) <= fits(fresh)
    assert bytes_of(after.finish()) == bytes_of(fresh.finish())


def test_nothing_that_is_kept_goes_through_a_stage(tmp_path):
    """Values that no stage could give again are taken over; rows that their data had rejected are rejected anew."""
    table = stars(40)
    before = survey(tmp_path, "before", table, **KEEP_DRAWS).finish()
    lucky = np.isin(table["star_id"].to_numpy(), rows_of(before, "catalogue")["star_id"].to_numpy())
    later = table.filter(pa.array(lucky)).take(pa.array(np.random.default_rng(1).permutation(lucky.sum())))
    run = survey(tmp_path, "after", later, [5, 9], process=_nothing_to_fit, earlier=[before], **KEEP_DRAWS)
    assert fits(run) == 0
    after = run.finish()
    for name in ("catalogue", "draws"):
        old = rows_of(before, name).sort_by("star_id")
        assert rows_of(after, name).sort_by("star_id").equals(old)
    assert rows_of(after, "catalogue")["star_id"].to_pylist() == later["star_id"].to_pylist()


def _nothing_to_fit(table, settings, model):
    assert not len(table)
    return by_content(table, settings, model)


@pytest.mark.parametrize("photosphere", ["calibrated", "auto"])
def test_stars_fitted_before_and_now_are_as_if_fitted_together(tmp_path, photosphere):
    """With the stages that fit stars, and with none of them left to fit."""
    options = {"model__photosphere": photosphere, "sampling__max_steps": 64} | KEEP_DRAWS

    def fitted(name, table, earlier=()):
        run = survey(tmp_path, name, table, earlier=earlier, **options)
        job = replace(run.job, stages=fitting_stages(), model=build_model(run.job.settings))
        return fits(run), replace(run, job=job).finish()

    table = stars(6)
    _, before = fitted("before", table)
    again, same = fitted("same", table, [before])
    assert again == 0
    assert bytes_of(same) == bytes_of(before)
    later = changed(table.take(pa.array([5, 1, 3, 0])), [1, 2])
    some, after = fitted("after", later, [before])
    assert some == 2
    assert bytes_of(after) == bytes_of(fitted("fresh", later)[1])


def test_rows_set_aside_for_faults_stay_so_under_their_new_place(tmp_path):
    """They stand among rows that their data had rejected, as if the faults had happened there again."""
    table, faults = stars(40), {3: "stage raised", 14: "took too long", 31: "worker died", 32: "took too long"}

    def set_aside(table, part_rows):
        places = [(place, faults[star]) for place, star in enumerate(table["star_id"].to_pylist()) if star in faults]
        rows = [(place // part_rows, SetAside(place % part_rows, reason, f"{reason}!")) for place, reason in places]
        return {part: [row for number, row in rows if number == part] for part, _ in rows}

    before = survey(tmp_path, "before", table, part_rows=7).finish(set_aside(table, 7))
    later = changed(table.take(pa.array(np.random.default_rng(2).permutation(40)[:36])), range(0, 36, 2))
    still = later.filter(pa.array(np.arange(36) % 2 != 0))
    kept_faults = [star for star in still["star_id"].to_pylist() if star in faults]
    assert 0 < len(kept_faults) < len(faults)
    after = survey(tmp_path, "after", later, earlier=[before], part_rows=12)
    faults = {star: faults[star] for star in kept_faults}
    fresh = survey(tmp_path, "fresh", later, part_rows=12).finish(set_aside(later, 12))
    assert bytes_of(after.finish()) == bytes_of(fresh)
    rejected = rows_of(fresh, "rejected")
    assert set(rejected["kind"].to_pylist()) == {"fault", "data"}


def test_a_row_comes_from_the_newest_of_several_results(tmp_path):
    table, draws = stars(30), KEEP_DRAWS
    first = survey(tmp_path, "first", table.slice(0, 20), **draws).finish()
    second = survey(tmp_path, "second", changed(table.slice(10, 20), [0, 1]), earlier=[first], **draws).finish()
    later = changed(table, [10]).take(pa.array(np.arange(29, -1, -1)))
    run = survey(tmp_path, "third", later, [13], earlier=[second, first], part_rows=7, **draws)
    assert {file.path.is_relative_to(second) for file in run.job.earlier} == {True, False}
    assert bytes_of(run.finish()) == bytes_of(survey(tmp_path, "fresh", later, [13], part_rows=7, **draws).finish())


def test_a_flag_for_repeats_follows_the_new_input(tmp_path):
    table = stars(8)
    repeated = pa.concat_tables([table, table.slice(1, 1)])
    flag = BY_NAME["duplicate_id"].value
    for name, old, new, flags in (("gains", table, repeated, flag), ("loses", repeated, table, 0)):
        before = survey(tmp_path, f"{name}-before", old, process=pass_through).finish()
        run = survey(tmp_path, f"{name}-after", new, process=pass_through, earlier=[before])
        assert fits(run) == len(new) - len(table)
        assert rows_of(run.finish(), "catalogue")["flags"].to_pylist()[1] == flag & flags


def test_partition_folders_of_the_old_results_and_the_new_need_not_agree(tmp_path):
    changes = {"output__layout": "hive", "output__rows_per_file": 5} | KEEP_DRAWS
    table = stars(40)
    old = {"field=T1/a.parquet": table.slice(0, 22), "field=T2/b.parquet": table.slice(22)}
    new = {"field=T1/a.parquet": table.slice(0, 7), "field=T3/b.parquet": changed(table.slice(7), [3, 30])}
    before = plan_run(tmp_path / "before", write_tables(tmp_path / "old", old), **changes).finish()
    after = plan_run(tmp_path / "after", write_tables(tmp_path / "new", new), earlier=[before], part_rows=9, **changes)
    fresh = plan_run(tmp_path / "fresh", tmp_path / "new", part_rows=9, **changes)
    assert fits(after) < 12
    assert bytes_of(after.finish()) == bytes_of(fresh.finish())


def test_an_id_may_change_its_type_and_carried_columns_are_the_new_ones(tmp_path):
    table = stars(20)
    before = survey(tmp_path, "before", table, input__carry=["ra"], **KEEP_DRAWS).finish()
    texts = with_column(table, "star_id", pa.array([str(star) for star in range(1, 21)]))
    later = with_column(texts, "dec", pa.array(np.arange(20.0), pa.float32()), {"unit": "deg"})
    options = {"input__carry": ["dec"]} | KEEP_DRAWS
    after = survey(tmp_path, "after", later, earlier=[before], **options)
    assert fits(after) < 10
    generation = after.finish()
    assert bytes_of(generation) == bytes_of(survey(tmp_path, "fresh", later, **options).finish())
    assert rows_of(generation, "catalogue").schema.field("dec").metadata[b"unit"] == b"deg"


def test_results_that_are_not_where_the_index_says_are_trouble(tmp_path):
    before = survey(tmp_path, "before", stars(20), **KEEP_DRAWS).finish()
    for name in ("catalogue", "draws"):
        run = survey(tmp_path, f"wrong-{name}", stars(20), earlier=[before], process=by_content, **KEEP_DRAWS)
        path = before / name / "part-000000.parquet"
        whole = path.read_bytes()
        table = pq.ParquetFile(path).read()
        pq.write_table(table.take(pa.array(np.roll(np.arange(len(table)), 1))), path)
        with pytest.raises(EnvironmentTrouble, match=f"{name}.*other rows are there than its index says"):
            run.finish()
        path.write_bytes(whole)


def test_results_that_are_gone_are_trouble(tmp_path):
    before = survey(tmp_path, "before", stars(20)).finish()
    run = survey(tmp_path, "after", stars(20), earlier=[before])
    (before / "catalogue" / "part-000000.parquet").unlink()
    with pytest.raises(EnvironmentTrouble, match=r"part-000000\.parquet: .*No such file"):
        run.finish()

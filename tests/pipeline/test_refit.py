"""A second run over an input that changed: what is fitted again, and that the result is that of a fresh run."""

import json
import os
import shutil
from collections import Counter

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fake_stages import FAILING_ID, by_content, pass_through, raise_at_failing_id, raise_disk_full, stages
from pipeline_survey import blackbodies, write
from small_survey import settings_for, stars, with_column
from starkiln.engine.run import RunOptions, run_settings
from starkiln.errors import EnvironmentTrouble
from starkiln.stages import model as fit_model

DRAWS = {"sampling__keep_draws": 2, "input__carry": ["ra"]}


def facts_of(run_dir):
    return json.loads((run_dir / "current" / "run.json").read_text())


def files_of(run_dir):
    """The digest of every file of a generation."""
    return facts_of(run_dir)["files"]


def counts_of(run_dir):
    """What became of the rows, as far as there are any."""
    return {name: count for name, count in facts_of(run_dir)["rows"].items() if count}


class Noting:
    """A stage that notes the ids it is given."""

    def __init__(self, process):
        self.process, self.given = process, []

    def __call__(self, table, settings, model):
        self.given += table[settings.input.id].to_pylist()
        return self.process(table, settings, model)


def run(folder, run_dir, process=pass_through, options=None, **changes):
    """Run a fake stage over a folder of tables; return the result and the ids that were given to the stage."""
    noting = Noting(process)
    settings = settings_for(folder, run_dir, **DRAWS | changes)
    return run_settings(settings, stages=stages(noting), options=options), noting.given


# ---- any change


SURVEY = stars(60)
ROW = st.tuples(st.integers(1, 12), st.integers(0, 2), st.integers(0, 1))
"""An id, 12 for none; which of three values it has; which of two carried values."""
FILES = st.lists(st.lists(ROW, max_size=10), min_size=1, max_size=3).filter(any)


def table_of(rows):
    ids, values, carried = (np.array(column, np.int64) for column in zip(*rows, strict=True)) if rows else [[]] * 3
    table = SURVEY.take(pa.array([5 * star + value - 5 for star, value in zip(ids, values, strict=True)], pa.int64()))
    table = with_column(table, "star_id", pa.array(ids, pa.int64(), mask=np.array(ids) == 12))
    return with_column(table, "ra", pa.array(np.array(carried, np.float64)))


def put(folder, files, group, hive):
    shutil.rmtree(folder, ignore_errors=True)
    for number, rows in enumerate(files):
        path = folder / (f"field=T{number % 2}" if hive else ".") / f"{number}.parquet"
        path.parent.mkdir(parents=True, exist_ok=True)
        pq.write_table(table_of(rows), path, row_group_size=group)


def in_order(files, hive):
    """The files in the order of their names."""
    return [*files[0::2], *files[1::2]] if hive else files


def first_copies(files):
    """The value of each id, by its first copy."""
    found = {}
    for rows in files:
        for star, value, _ in rows:
            found.setdefault(star, value)
    found.pop(12, None)
    return found


def expected_counts(before, after):
    old, new = first_copies(before), first_copies(after)
    rows = [star for file in after for star, _, _ in file]
    counts = Counter(
        "new" if star not in old else "kept" if old[star] == value else "changed" for star, value in new.items()
    )
    counts["without_id"] = rows.count(12)
    counts["duplicate"] = len(rows) - len(new) - counts["without_id"]
    counts["gone"] = len(old.keys() - new.keys())
    return dict(+counts)


@pytest.mark.slow
@settings(max_examples=30)
@given(before=FILES, after=FILES, groups=st.tuples(st.integers(1, 5), st.integers(1, 5)), hive=st.booleans())
def test_a_refit_gives_the_files_of_a_fresh_run(tmp_path_factory, before, after, groups, hive):
    tmp_path = tmp_path_factory.mktemp("refit")
    folder, run_dir, fresh_dir = tmp_path / "survey", tmp_path / "run", tmp_path / "fresh"
    changes = {"output__layout": "hive" if hive else "flat", "output__rows_per_file": 4, "compute__rows_per_part": 3}
    put(folder, before, groups[0], hive)
    run(folder, run_dir, by_content, **changes)
    put(folder, after, groups[1], hive)
    refit, given_ids = run(folder, run_dir, by_content, **changes)
    run(folder, fresh_dir, by_content, **changes)
    assert files_of(run_dir) == files_of(fresh_dir)
    if not refit.message.startswith("nothing to do"):
        before, after = in_order(before, hive), in_order(after, hive)
        assert counts_of(run_dir) == expected_counts(before, after)
        old, new = first_copies(before), first_copies(after)
        refitted = {star for star, value in new.items() if old.get(star) != value}
        rejected = set(pq.read_table(run_dir / "rejected")["star_id"].to_pylist())
        assert refitted <= set(given_ids) <= refitted | rejected
    shutil.rmtree(tmp_path)


def test_a_refit_gives_the_files_of_a_fresh_run_with_the_fit_itself(survey, tmp_path):
    run_settings(survey("run", **DRAWS))
    table = pa.concat_tables([blackbodies(30, 1), blackbodies(20, 31)])
    brighter = [1.1 * flux if row in (3, 40) else flux for row, flux in enumerate(table["panstarrs_g"].to_pylist())]
    table = with_column(table, "panstarrs_g", brighter)
    table = pa.concat_tables([table.slice(0, 10), blackbodies(3, 101), table.slice(15)])
    moved = write(tmp_path / "moved", row_group_size=7, z=table.slice(20), y=table.slice(0, 20))
    other = {"input__tables": str(moved)} | DRAWS
    run_settings(survey("run", **other))
    run_settings(survey("fresh", **other))
    assert files_of(tmp_path / "run") == files_of(tmp_path / "fresh")
    assert counts_of(tmp_path / "run") == {"new": 3, "changed": 2, "kept": 43, "gone": 5}


# ---- nothing changed


def snapshot(folder):
    return {path: (os.lstat(path).st_mtime_ns, os.lstat(path).st_ino) for path in sorted(folder.rglob("*"))}


def test_where_nothing_changed_nothing_of_a_generation_is_touched(tmp_path):
    folder = write(tmp_path / "survey", a=stars(30))
    first, _ = run(folder, tmp_path / "run")
    before = snapshot(tmp_path / "run" / "generations")
    again, given_ids = run(folder, tmp_path / "run")
    assert (again.exit_code, again.path, given_ids) == (0, first.path, [])
    assert again.message.startswith("nothing to do")
    assert again.counts == first.counts
    assert snapshot(tmp_path / "run" / "generations") == before


def test_an_input_that_is_only_touched_is_found_to_be_the_same(tmp_path):
    folder = write(tmp_path / "survey", a=stars(30))
    first, _ = run(folder, tmp_path / "run")
    before = snapshot(first.path)
    os.utime(folder / "a.parquet", ns=(1, 1))
    again, given_ids = run(folder, tmp_path / "run")
    assert (again.exit_code, again.path, given_ids) == (0, first.path, [])
    assert snapshot(first.path) == before
    assert not (tmp_path / "run" / "planning").exists()


@pytest.mark.parametrize(
    "changes",
    [{"compute__rows_per_part": 7}, {"compute__workers": 1}, {"compute__scratch": None}, {"run__keep_generations": 3}],
)
def test_settings_of_the_machine_do_nothing(tmp_path, changes):
    folder = write(tmp_path / "survey", a=stars(30))
    first, _ = run(folder, tmp_path / "run")
    if "compute__scratch" in changes:
        changes = {"compute__scratch": str(tmp_path)}
    again, given_ids = run(folder, tmp_path / "run", **changes)
    assert (again.path, given_ids) == (first.path, [])


# ---- nothing to fit, and yet another result


def test_files_renamed_split_merged_or_grouped_otherwise_refit_nothing(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(30), b=stars(20, 31)), tmp_path / "run"
    whole = pa.concat_tables([stars(30), stars(20, 31)])
    run(folder, run_dir)
    catalogue = pq.read_table(run_dir / "catalogue")
    layouts = [
        {"c": stars(30), "d": stars(20, 31)},
        {"a": whole.slice(0, 7), "b": whole.slice(7, 20), "c": whole.slice(27)},
        {"all": whole},
    ]
    for number, tables in enumerate(layouts):
        shutil.rmtree(folder)
        write(folder, row_group_size=3 + number, **tables)
        _, given_ids = run(folder, run_dir)
        assert given_ids == []
        assert counts_of(run_dir) == {"kept": 50}
        assert pq.read_table(run_dir / "catalogue").equals(catalogue)


def test_rows_in_another_order_are_kept_in_the_new_order(tmp_path):
    folder = write(tmp_path / "survey", a=stars(30))
    run(folder, tmp_path / "run")
    write(folder, a=stars(30).take(pa.array(range(29, -1, -1))))
    _, given_ids = run(folder, tmp_path / "run")
    assert given_ids == []
    assert pq.read_table(tmp_path / "run" / "catalogue")["star_id"].to_pylist() == list(range(30, 0, -1))


def test_carried_columns_follow_the_input_without_a_fit(tmp_path):
    folder = write(tmp_path / "survey", a=stars(30))
    run(folder, tmp_path / "run")
    moved = with_column(stars(30), "ra", np.arange(30.0))
    write(folder, a=moved)
    _, given_ids = run(folder, tmp_path / "run")
    assert given_ids == []
    assert pq.read_table(tmp_path / "run" / "catalogue")["ra"].to_pylist() == list(range(30))
    _, given_ids = run(folder, tmp_path / "run", input__carry=["dec", "ra"])
    assert given_ids == []
    assert pq.read_table(tmp_path / "run" / "catalogue")["dec"].equals(stars(30)["dec"])
    assert files_of(tmp_path / "run") == files_after(folder, tmp_path / "fresh", input__carry=["dec", "ra"])


def files_after(folder, run_dir, **changes):
    run(folder, run_dir, **changes)
    return files_of(run_dir)


@pytest.mark.parametrize("changes", [{"output__per_band": "residual"}, {"output__rows_per_file": 7}])
def test_an_output_of_another_shape_refits_nothing(tmp_path, changes):
    folder = write(tmp_path / "survey", a=stars(30))
    run(folder, tmp_path / "run")
    _, given_ids = run(folder, tmp_path / "run", **changes)
    assert given_ids == []
    assert files_of(tmp_path / "run") == files_after(folder, tmp_path / "fresh", **changes)


def test_columns_that_were_not_made_before_need_a_fit(tmp_path):
    folder = write(tmp_path / "survey", a=stars(30))
    run(folder, tmp_path / "run", output__per_band="none")
    _, given_ids = run(folder, tmp_path / "run")
    assert given_ids == list(range(1, 31))
    assert facts_of(tmp_path / "run")["why"].startswith("the published catalogue has no columns residual_")


def test_rows_rejected_for_their_data_are_told_from_where_they_are_now(tmp_path):
    table = with_column(stars(4), "star_id", pa.array([1, None, 1, 2], pa.int64()))
    folder = write(tmp_path / "survey", a=table)
    run(folder, tmp_path / "run")
    (folder / "a.parquet").rename(folder / "b.parquet")
    run(folder, tmp_path / "run")
    rejected = pq.read_table(tmp_path / "run" / "rejected")
    assert rejected["input_file"].to_pylist() == ["b.parquet"] * 2
    assert counts_of(tmp_path / "run") == {"kept": 2, "duplicate": 1, "without_id": 1}


# ---- everything to fit


@pytest.mark.parametrize(
    ("changes", "why"),
    [
        ({"run__seed": 7}, "settings changed (seed: "),
        ({"model__extinction__scale": 0.5}, "settings changed (model.extinction.scale: 0.3 -> 0.5)"),
        ({"input__min_bands": 2}, "settings changed (min_bands: 3 -> 2)"),
    ],
)
def test_settings_of_a_fit_refit_all_and_are_named(tmp_path, changes, why):
    folder = write(tmp_path / "survey", a=stars(30))
    run(folder, tmp_path / "run")
    write(folder, a=stars(30).slice(5), b=stars(2, 31))
    _, given_ids = run(folder, tmp_path / "run", **changes)
    assert given_ids == [*range(6, 31), 31, 32]
    assert facts_of(tmp_path / "run")["why"].startswith(why)
    assert counts_of(tmp_path / "run") == {"new": 2, "changed": 25, "gone": 5}


def curve(path, slope):
    rows = [f"{400 + 10 * k} {0.5 + slope * k}" for k in range(11)]
    lines = ["# %ECSV 1.0", "# ---", "# datatype:", "# - {name: wavelength, unit: nm, datatype: float64}"]
    path.write_text("\n".join([*lines, "# - {name: response, datatype: float64}", "wavelength response", *rows]) + "\n")


def test_a_curve_or_a_version_of_the_method_that_changed_refits_all_and_is_named(survey, tmp_path, monkeypatch):
    curve(tmp_path / "blue.ecsv", 0.01)
    own = [{"name": "tamarin_blue", "curve": str(tmp_path / "blue.ecsv"), "detector": "photon"}]
    bands = [
        {"passband": "tamarin_blue", "value": "panstarrs_g", "error": "panstarrs_g_error", "unit": "nJy"},
        {"passband": "panstarrs_r", "value": "panstarrs_r", "error": "panstarrs_r_error", "unit": "nJy"},
        {"passband": "panstarrs_i", "value": "panstarrs_i", "error": "panstarrs_i_error", "unit": "nJy"},
    ]
    changes = {"passband": own, "input__photometry": bands, "model__photosphere": "blackbody"}
    write(tmp_path / "survey", a=blackbodies(8, 1), b=blackbodies(2, 9))
    run_settings(survey(**changes))
    assert facts_of(tmp_path / "run")["why"] == ""
    curve(tmp_path / "blue.ecsv", 0.02)
    run_settings(survey(**changes))
    assert facts_of(tmp_path / "run")["why"] == "passbands changed (tamarin_blue)"
    assert counts_of(tmp_path / "run") == {"changed": 10}
    monkeypatch.setattr("starkiln.engine.provenance.METHOD_VERSION", fit_model.METHOD_VERSION + 1)
    run_settings(survey(**changes))
    why = f"the method's version changed ({fit_model.METHOD_VERSION} -> {fit_model.METHOD_VERSION + 1})"
    assert facts_of(tmp_path / "run")["why"] == why
    assert counts_of(tmp_path / "run") == {"changed": 10}


def test_refit_all_fits_every_row_and_ends_with_the_same_files(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(30)), tmp_path / "run"
    run(folder, run_dir)
    before, first = files_of(run_dir), (run_dir / "current").resolve()
    _, given_ids = run(folder, run_dir, options=RunOptions(refit_all=True))
    assert given_ids == list(range(1, 31))
    assert (run_dir / "current").resolve() != first
    assert files_of(run_dir) == before
    assert (facts_of(run_dir)["why"], counts_of(run_dir)) == ("--refit-all was given", {"changed": 30})


# ---- faults


def test_rows_set_aside_stay_so_until_they_are_retried(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(30)), tmp_path / "run"
    result, _ = run(folder, run_dir, raise_at_failing_id)
    assert result.exit_code == 4
    assert counts_of(run_dir) == {"new": 30, "set_aside": 1}
    write(folder, a=stars(30), b=stars(2, 31))
    result, given_ids = run(folder, run_dir)
    assert (result.exit_code, given_ids) == (0, [31, 32])
    assert counts_of(run_dir) == {"new": 2, "kept": 29, "failed": 1}
    rejected = pq.read_table(run_dir / "rejected").to_pylist()
    assert [(row["star_id"], row["kind"], row["input_file"]) for row in rejected] == [
        (FAILING_ID, "fault", "a.parquet")
    ]
    result, given_ids = run(folder, run_dir)
    assert (result.message.startswith("nothing to do"), given_ids) == (True, [])
    result, given_ids = run(folder, run_dir, options=RunOptions(retry_failed=True))
    assert (result.exit_code, given_ids) == (0, [FAILING_ID])
    assert counts_of(run_dir) == {"kept": 31, "retried": 1}
    assert len(pq.read_table(run_dir / "rejected")) == 0
    result, given_ids = run(folder, run_dir, options=RunOptions(retry_failed=True))
    assert (result.message.startswith("nothing to do"), given_ids) == (True, [])


def test_a_row_set_aside_is_tried_again_when_its_values_change(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(30)), tmp_path / "run"
    run(folder, run_dir, raise_at_failing_id)
    parallax = stars(30)["parallax"].to_pylist()
    parallax[FAILING_ID - 1] = 7.0
    write(folder, a=with_column(stars(30), "parallax", parallax))
    _, given_ids = run(folder, run_dir)
    assert given_ids == [FAILING_ID]
    assert counts_of(run_dir) == {"changed": 1, "kept": 29}


# ---- builds that were given up, and old generations


def test_what_a_stopped_run_has_done_is_not_done_again_when_the_input_grows(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(10), b=stars(20, 11)), tmp_path / "run"
    with pytest.raises(EnvironmentTrouble):
        run(folder, run_dir, raise_disk_full, compute__rows_per_part=5)
    parts = list((run_dir / "generations").glob("*.partial/parts/catalogue/part-*"))
    done = {star for path in parts for star in pq.read_table(path)["star_id"].to_pylist()}
    assert FAILING_ID not in done
    assert len(done) >= 10
    write(folder, c=stars(3, 41))
    _, given_ids = run(folder, run_dir, compute__rows_per_part=5)
    assert set(given_ids) == {*range(1, 31), 41, 42, 43} - done
    assert counts_of(run_dir) == {"new": 33 - len(done), "kept": len(done)}
    assert [path.name for path in (run_dir / "generations").iterdir()] == [(run_dir / "current").resolve().name]


def test_generations_beyond_those_to_keep_are_removed(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(10)), tmp_path / "run"
    names = []
    for number in range(4):
        write(folder, **{f"more{number}": stars(1, 101 + number)})
        run(folder, run_dir, run__keep_generations=2)
        names.append((run_dir / "current").resolve().name)
    assert sorted(path.name for path in (run_dir / "generations").iterdir()) == names[-2:]
    assert len(set(names)) == 4


def test_a_published_file_that_is_lost_is_told_and_all_is_fitted_again(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(10)), tmp_path / "run"
    first, _ = run(folder, run_dir)
    (first.path / "draws" / "part-000000.parquet").unlink()
    write(folder, b=stars(1, 101))
    _, given_ids = run(folder, run_dir)
    assert len(given_ids) == 11
    assert facts_of(run_dir)["why"] == "the published generation lacks draws/part-000000.parquet"


def test_the_plan_of_a_refit_adds_up(tmp_path):
    folder, run_dir = write(tmp_path / "survey", a=stars(30)), tmp_path / "run"
    run(folder, run_dir)
    write(folder, a=with_column(stars(30), "star_id", pa.array([*range(3, 31), None, 3], pa.int64())))
    result, _ = run(folder, run_dir)
    rows = facts_of(run_dir)["rows"]
    told = {name: count for name, count in rows.items() if name not in ("gone", "set_aside")}
    assert sum(told.values()) == result.counts["selected"] == 30

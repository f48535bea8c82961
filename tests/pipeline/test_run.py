"""A run from tables to a published catalogue, with the fit itself."""

import json

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import starkiln
from pipeline_survey import blackbodies, write
from small_survey import with_column
from starkiln.engine import build
from starkiln.engine.run import RunOptions, run_settings
from starkiln.errors import EnvironmentTrouble
from starkiln.settings import dump_toml

TABLES = ("catalogue", "rejected", "index")


def facts_of(generation):
    return json.loads((generation / "run.json").read_text())


def digests(settings):
    return facts_of(run_settings(settings).path)["files"]


def hurt(table):
    """Spoil some rows: no id, an id that comes again, no flux in two bands, no error anywhere."""
    ids = table["star_id"].to_pylist()
    ids[3], ids[7] = None, ids[2]
    table = with_column(table, "star_id", pa.array(ids, pa.int64()))
    for place, label in enumerate(("panstarrs_g", "panstarrs_r", "panstarrs_i")):
        values, errors = table[label].to_pylist(), table[f"{label}_error"].to_pylist()
        if place:
            values[11] = float("nan")
        errors[12] = -1.0
        table = with_column(with_column(table, label, values), f"{label}_error", errors)
    return table


def test_every_row_is_accounted_for(survey, tmp_path):
    table = hurt(with_column(blackbodies(40, 101), "field", ["A"] * 30 + ["B"] * 10))
    write(tmp_path / "other", row_group_size=9, a=table)
    result = run_settings(survey(input__tables=str(tmp_path / "other"), input__where=[["field", "=", "A"]]))
    counts = result.counts
    assert result.exit_code == 0
    assert counts["read"] == counts["filtered"] + counts["selected"] == 40
    assert counts["selected"] == counts["catalogue"] + counts["rejected"] + counts["pending"] == 30
    assert counts["rejected"] == sum(counts["rejected_by_reason"].values()) == 4
    assert counts["pending"] == 0
    catalogue = pq.read_table(result.path / "catalogue")
    rejected = pq.read_table(result.path / "rejected")
    assert (len(catalogue), len(rejected)) == (counts["catalogue"], counts["rejected"])
    assert rejected["input_row"].to_pylist() == [3, 7, 11, 12]
    assert set(rejected["kind"].to_pylist()) == {"data"}
    ids = [star for row, star in enumerate(table["star_id"].to_pylist()[:30]) if row not in (3, 7, 11, 12)]
    assert catalogue["star_id"].to_pylist() == ids
    assert facts_of(result.path)["flags"]["duplicate_id"] == 1


def test_int64_ids_survive_exactly_beside_a_null(survey, tmp_path):
    ids = [2**62 + row for row in range(20)]
    table = with_column(blackbodies(20), "star_id", pa.array([*ids[:-1], None], pa.int64()))
    write(tmp_path / "other", a=table)
    result = run_settings(survey(input__tables=str(tmp_path / "other")))
    catalogue, rejected = starkiln.read(tmp_path / "run"), pq.read_table(result.path / "rejected")
    assert catalogue["star_id"].tolist() == ids[:-1]
    assert catalogue["star_id"].dtype == np.int64
    assert rejected["star_id"].to_pylist() == [None]
    assert rejected["reason"].to_pylist() == list(result.counts["rejected_by_reason"])


def test_the_same_bytes_for_any_parts_workers_and_row_groups(survey, tmp_path, monkeypatch):
    expected = digests(survey("serial"))
    assert digests(survey("small-parts", compute__rows_per_part=7)) == expected
    write(tmp_path / "regrouped", row_group_size=4, a=blackbodies(30, 1), b=blackbodies(20, 31))
    regrouped = survey("regrouped-run", input__tables=str(tmp_path / "regrouped"), compute__rows_per_part=11)
    assert digests(regrouped) == expected
    monkeypatch.setattr(build, "SMALL_RUN_ROWS", -1)
    for workers in (1, 2):
        changes = {"compute__workers": workers, "compute__rows_per_part": 9}
        assert digests(survey(f"workers-{workers}", **changes)) == expected
    assert {name.split("/")[0] for name in expected} == set(TABLES)


def test_a_second_run_has_nothing_to_do_and_touches_nothing(survey, tmp_path):
    settings = survey()
    first = run_settings(settings)
    before = {path: path.stat().st_mtime_ns for path in (tmp_path / "run" / "generations").rglob("*")}
    second = run_settings(settings)
    assert (second.exit_code, second.path, second.counts) == (0, first.path, first.counts)
    assert second.message == f"nothing to do: {first.message}"
    assert {path: path.stat().st_mtime_ns for path in (tmp_path / "run" / "generations").rglob("*")} == before


def test_refitting_all_publishes_the_same_bytes_and_says_why(survey):
    settings = survey(sampling__keep_draws=3)
    first = run_settings(settings).path
    second = run_settings(settings, options=RunOptions(refit_all=True)).path
    assert (first.name, second.name) == ("000001", "000002")
    assert facts_of(second)["why"] == "--refit-all was given"
    files = sorted(path.relative_to(first) for path in first.rglob("*.parquet"))
    assert {path.parts[0] for path in files} == {*TABLES, "draws"}
    for path in files:
        assert (first / path).read_bytes() == (second / path).read_bytes()


def test_only_what_is_new_or_changed_is_fitted_and_the_bits_are_those_of_a_fresh_run(survey, tmp_path):
    first = run_settings(survey(sampling__keep_draws=3))
    table = blackbodies(20, 31)
    brighter = table["panstarrs_g"].to_numpy().copy()
    brighter[4] *= 1.1
    write(tmp_path / "survey", b=with_column(table, "panstarrs_g", brighter), c=blackbodies(5, 101))
    refitted = run_settings(survey(sampling__keep_draws=3))
    facts = facts_of(refitted.path)
    assert {name: facts["rows"][name] for name in ("new", "changed", "kept", "gone")} == {
        "new": 5,
        "changed": 1,
        "kept": 49,
        "gone": 0,
    }
    assert refitted.message.endswith("; 5 new, 1 changed, 49 kept, 0 gone")
    assert facts["files"] == digests(survey("fresh", sampling__keep_draws=3))
    assert facts["files"] != facts_of(first.path)["files"]


def test_the_audit_of_a_refit_covers_the_stars_that_stay(survey, tmp_path):
    run_settings(survey())
    write(tmp_path / "survey", c=blackbodies(5, 101))
    added = facts_of(run_settings(survey()).path)
    fresh = facts_of(run_settings(survey("fresh")).path)
    assert added["zero_point_audit_stars"] == {"fitted": 5, "earlier": 50, "outdated": 0}
    assert added["zero_point_audit"] == fresh["zero_point_audit"]


def test_the_audit_leaves_earlier_stars_out_once_too_many_have_changed(survey, tmp_path):
    run_settings(survey())
    write(tmp_path / "survey", b=blackbodies(10, 31))
    facts = facts_of(run_settings(survey()).path)
    assert facts["rows"]["gone"] + facts["rows"]["changed"] >= 10
    assert facts["zero_point_audit_stars"]["earlier"] == 0


def test_the_catalogue_in_memory_has_the_same_rows(survey):
    settings = survey()
    published = pq.read_table(run_settings(settings).path / "catalogue").to_pandas()
    table = pa.concat_tables([blackbodies(30, 1), blackbodies(20, 31)])
    frame = starkiln.fit_table(table, settings)
    assert list(frame.columns) == list(published.columns)
    for name in frame.columns:
        assert pa.array(frame[name]).equals(pa.array(published[name])), name


def test_run_json_tells_the_whole_story(survey):
    settings = survey()
    facts = facts_of(run_settings(settings).path)
    assert facts["name"] == "tamarin"
    assert facts["exit_code"] == 0
    assert facts["start"] < facts["end"]
    assert set(facts["seconds"]["wall"]) == {"open", "plan", "warm up", "work", "pack"}
    assert set(facts["seconds"]["summed_over_workers"]) == {"cut", "keep", "process", "write"}
    assert facts["stars_per_second"] > 0
    assert min(facts["peak_memory_bytes"].values()) > 50e6
    assert {"python", "numpy", "numba", "starkiln"} <= set(facts["versions"])
    assert set(facts["hashes"]["passbands"]) == {"panstarrs_g", "panstarrs_r", "panstarrs_i"}
    assert facts["hashes"].keys() >= {"fit_key", "rows", "inputs", "content", "output"}
    assert facts["rows"] == dict.fromkeys(facts["rows"], 0) | {"new": 50}
    assert facts["zero_point_audit_stars"] == {"fitted": 50, "earlier": 0, "outdated": 0}
    assert [file["rows"] for file in facts["input"]["files"]] == [30, 20]
    assert facts["passbands"]["panstarrs_g"]["source"]


def test_nothing_else_is_left_in_the_run_directory(survey, tmp_path):
    settings = survey(sampling__keep_draws=5)
    result = run_settings(settings)
    assert sorted(path.name for path in (tmp_path / "run").iterdir()) == [
        "catalogue",
        "current",
        "generations",
        "ledger.sqlite",
        "lock",
        "logs",
        "progress.json",
        "rejected",
    ]
    assert [path.name for path in (tmp_path / "run" / "generations").iterdir()] == ["000001"]
    assert sorted(path.name for path in result.path.iterdir()) == [
        "audit.npz",
        "catalogue",
        "draws",
        "index",
        "rejected",
        "run.json",
        "settings.toml",
    ]
    assert (result.path / "settings.toml").read_text() == dump_toml(settings)
    (log,) = (tmp_path / "run" / "logs").iterdir()
    events = [json.loads(line)["event"] for line in log.read_text().splitlines()]
    assert events == ["start", "plan", "part", "publish", "end"]


def test_a_reader_that_opened_the_old_generation_sees_it_whole(survey, tmp_path):
    run_settings(survey(run__seed=1))
    opened = (tmp_path / "run" / "catalogue").resolve()
    with pq.ParquetFile(tmp_path / "run" / "catalogue" / "part-000000.parquet") as reader:
        old = reader.read(["star_id"])
        run_settings(survey(run__seed=2))
        assert reader.read(["teff_p50"]).num_rows == len(old)
        old_teff = pq.read_table(opened, columns=["teff_p50"])
        assert reader.read(["teff_p50"]).equals(old_teff)
    new_teff = pq.read_table((tmp_path / "run" / "catalogue").resolve(), columns=["teff_p50"])
    assert not new_teff.equals(old_teff)


def test_the_python_door_returns_the_outcome(survey, tmp_path):
    path = tmp_path / "run.toml"
    path.write_text(dump_toml(survey()))
    result = starkiln.run(path)
    assert (result.exit_code, result.counts["catalogue"]) == (0, 50)
    assert result.path == tmp_path / "run" / "generations" / "000001"
    path.write_text(dump_toml(survey(input__id="starid")))
    failed = starkiln.run(path)
    assert (failed.exit_code, failed.path) == (3, None)
    assert "did you mean 'star_id'?" in failed.message


@pytest.mark.parametrize("name", ["a", "b"])
def test_a_file_that_changes_during_the_run_stops_it(survey, tmp_path, name, monkeypatch):
    make_plan = build.make_plan

    def plan_then_touch(*arguments, **more):
        plan = make_plan(*arguments, **more)
        with (tmp_path / "survey" / f"{name}.parquet").open("ab") as file:
            file.write(b"more")
        return plan

    monkeypatch.setattr(build, "make_plan", plan_then_touch)
    with pytest.raises(EnvironmentTrouble, match=rf"{name}\.parquet has changed since the run was planned"):
        run_settings(survey())
    (log,) = (tmp_path / "run" / "logs").iterdir()
    assert json.loads(log.read_text().splitlines()[-1])["exit_code"] == 74

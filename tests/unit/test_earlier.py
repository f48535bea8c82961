import json
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fake_stages import NoModel, pass_through, reject_odd_ids
from planning import planned, written
from small_survey import settings_for, stars, with_column
from starkiln.engine.earlier import find_earlier, index_records, index_size, published_facts
from starkiln.engine.join import CATALOGUE, DATA, FAULT, STALE
from starkiln.engine.keys import ROWS_VERSION
from starkiln.engine.provenance import hashes as hashes_of
from starkiln.engine.records import Build, DonePart, EarlierFile, PartFile, RowCounts
from starkiln.engine.rownotes import note_columns, read_notes
from starkiln.errors import EnvironmentTrouble
from starkiln.settings import dump_toml
from starkiln.tables.columns import index_schema
from starkiln.tables.hashes import id_hashes, row_hashes
from starkiln.tables.source import open_source
from starkiln.tables.write import file_sha256

DRAWS = {"sampling__keep_draws": 2}
ROWS = 12


def cut(table):
    origin = pa.table({"_input_file": ["a.parquet"] * len(table), "_input_row": np.arange(len(table))})
    for name in origin.column_names:
        table = table.append_column(name, origin[name])
    return table.append_column("_duplicate", pa.array(np.zeros(len(table), np.int8)))


def put(folder, name, table):
    path = folder / name
    path.parent.mkdir(parents=True, exist_ok=True)
    pq.write_table(table, path, write_page_checksum=True)
    return path


def results(settings, table, process=reject_odd_ids, faults=()):
    """The tables of a part, and its index with the place of each row; ids in `faults` are rejected for a fault."""
    made = process(cut(table), settings, NoModel())
    kinds = ["fault" if star in faults else "data" for star in made.rejected["star_id"].to_pylist()]
    place = made.rejected.column_names.index("kind")
    tables = {"catalogue": made.catalogue, "rejected": made.rejected.set_column(place, "kind", pa.array(kinds))}
    if made.draws is not None:
        tables["draws"] = made.draws
    where = {
        star: (name, row)
        for name in ("catalogue", "rejected")
        for row, star in enumerate(tables[name]["star_id"].to_pylist())
    }
    places = [where[star] for star in table["star_id"].to_pylist()]
    return tables, {
        "id_hash": id_hashes(table["star_id"])[0],
        "row_hash": row_hashes(table, settings),
        "file": [name for name, _ in places],
        "row": [row for _, row in places],
    }


def publish(run_dir, settings, table, number=7, **options):
    """Make a published generation of one file a table, as a run leaves it."""
    folder = run_dir / "generations" / f"{number:06d}"
    tables, index = results(settings, table, **options)
    index["file"] = [f"{name}/part-000000.parquet" for name in index["file"]]
    tables["index"] = pa.table(index, schema=index_schema())
    for name, rows in tables.items():
        put(folder, f"{name}/part-000000.parquet", rows)
    (folder / "settings.toml").write_text(dump_toml(settings))
    names = {f"{name}/part-000000.parquet": {"rows": len(rows)} for name, rows in tables.items()}
    facts = {"hashes": hashes_of(settings, NoModel()) | {"rows": ROWS_VERSION}, "files": names}
    (folder / "run.json").write_text(json.dumps(facts))
    (run_dir / "current").unlink(missing_ok=True)
    (run_dir / "current").symlink_to(folder)
    return folder


def build_of(run_dir, settings, tables, number=8, refit_all=False, **options):
    """Make a build that was given up, of one part a table."""
    parts, folder = {}, run_dir / "generations" / f"{number:06d}.partial" / "parts"
    for part, table in enumerate(tables):
        made, index = results(settings, table, **options)
        made["index"] = pa.table(index, schema=index_schema())
        paths = {name: put(folder, f"{name}/part-{part:06d}.parquet", rows) for name, rows in made.items()}
        files = {
            name: PartFile(len(made[name]), path.stat().st_size, file_sha256(path)) for name, path in paths.items()
        }
        parts[part] = DonePart(part, len(table), len(table), files, {}, {}, b"", {}, 0, "")
    key = hashes_of(settings, NoModel())["fit_key"]
    return Build(number, "", key, refit_all, False, "", len(tables), "earlier"), parts


@pytest.fixture
def survey(tmp_path):
    source, settings = written(tmp_path / "input", [stars(ROWS)], output=tmp_path / "run", **DRAWS)
    return source, settings, tmp_path / "run"


def found(survey, builds=(), refit_all=False, **changes):
    source, settings, run_dir = survey
    if changes:
        settings = settings_for(settings.input.tables, run_dir, **DRAWS | changes)
        source = open_source(settings)
    now = hashes_of(settings, NoModel())
    return find_earlier(run_dir, builds, settings, now, source, refit_all=refit_all)


def kinds_of(source, first_number=0):
    records = np.concatenate(list(index_records(source, first_number)))
    return {int(key): int(kind) for key, kind in records[["id_hash", "kind"]].tolist()}


def hash_of(star):
    return int(id_hashes(pa.array([star]))[0][0])


def test_where_nothing_is_published_there_is_nothing(survey):
    assert published_facts(survey[2]) is None
    assert found(survey).sources == ()
    assert found(survey).why == ""


def test_facts_tell_the_number_and_the_digest_of_the_published_generation(survey):
    folder = publish(survey[2], survey[1], stars(ROWS))
    facts = published_facts(survey[2])
    assert (facts["number"], facts["sha256"]) == (7, file_sha256(folder / "run.json"))
    assert facts["hashes"]["rows"] == ROWS_VERSION


@pytest.mark.parametrize("text", ["", "{"])
def test_facts_that_cannot_be_read_are_trouble(survey, text):
    folder = publish(survey[2], survey[1], stars(ROWS))
    (folder / "run.json").write_text(text)
    with pytest.raises(EnvironmentTrouble, match=r"cannot read .*run\.json"):
        published_facts(survey[2])


def test_rows_of_the_published_generation_are_found_with_what_became_of_them(survey):
    folder = publish(survey[2], survey[1], stars(ROWS), faults=(3,))
    earlier = found(survey)
    assert earlier.why == ""
    (source,) = earlier.sources
    assert source.files == (
        EarlierFile(folder / "catalogue/part-000000.parquet", folder / "draws/part-000000.parquet", "catalogue"),
        EarlierFile(folder / "rejected/part-000000.parquet", None, "rejected"),
    )
    assert (source.published, source.usable, index_size(source)) == (True, True, ROWS)
    expected = {hash_of(star): FAULT if star == 3 else DATA if star % 2 else CATALOGUE for star in range(1, ROWS + 1)}
    assert kinds_of(source) == expected
    for record in np.concatenate(list(index_records(source, 5))):
        table = pq.read_table(source.files[record["source"] - 5].path)
        star = table["star_id"][int(record["row"])].as_py()
        assert hash_of(star) == record["id_hash"]
        assert record["row_hash"] == row_hashes(stars(ROWS).slice(star - 1, 1), survey[1])[0]
        assert record["published"] == 1


@pytest.mark.parametrize(
    ("changes", "why"),
    [
        ({"model__extinction__scale": 0.5}, "settings changed (model.extinction.scale: 0.3 -> 0.5)"),
        ({"run__seed": 5}, "settings changed (seed: "),
        ({"model__jitter": True}, "settings changed (model.jitter: False -> True)"),
    ],
)
def test_settings_of_a_fit_that_changed_leave_only_the_ids(survey, changes, why):
    publish(survey[2], survey[1], stars(ROWS))
    earlier = found(survey, **changes)
    assert earlier.why.startswith(why)
    (source,) = earlier.sources
    assert not source.usable
    assert set(kinds_of(source).values()) == {STALE}
    assert len(kinds_of(source)) == ROWS


@pytest.mark.parametrize(
    "changes", [{"compute__rows_per_part": 5}, {"input__carry": ["ra"]}, {"output__per_band": "none"}]
)
def test_other_settings_leave_results_usable(survey, changes):
    publish(survey[2], survey[1], stars(ROWS))
    earlier = found(survey, **changes)
    assert earlier.why == ""
    assert earlier.sources[0].usable


def test_columns_that_are_asked_for_now_and_were_not_then_are_told(survey):
    _, settings, run_dir = survey
    publish(run_dir, settings_for(settings.input.tables, run_dir, output__per_band="residual", **DRAWS), stars(ROWS))
    assert found(survey).why.startswith("the published catalogue has no columns outlier_panstarrs_g, ")


def test_a_generation_of_an_earlier_version_is_not_even_asked_for_ids(survey):
    folder = publish(survey[2], survey[1], stars(ROWS))
    facts = json.loads((folder / "run.json").read_text())
    facts["hashes"]["rows"] = ROWS_VERSION - 1
    (folder / "run.json").write_text(json.dumps(facts))
    earlier = found(survey)
    assert earlier.sources == ()
    assert "earlier version" in earlier.why


def test_a_generation_that_lacks_a_file_is_not_used(survey):
    folder = publish(survey[2], survey[1], stars(ROWS))
    (folder / "draws/part-000000.parquet").unlink()
    earlier = found(survey)
    assert earlier.why == "the published generation lacks draws/part-000000.parquet"
    assert not earlier.sources[0].usable


def test_refitting_all_uses_only_builds_that_did(survey):
    _, settings, run_dir = survey
    publish(run_dir, settings, stars(ROWS))
    builds = [build_of(run_dir, settings, [stars(3)], 8), build_of(run_dir, settings, [stars(3)], 9, refit_all=True)]
    earlier = found(survey, builds, refit_all=True)
    assert earlier.why == "--refit-all was given"
    assert [source.folder.name for source in earlier.sources] == ["000009.partial", "000007"]
    assert [source.usable for source in earlier.sources] == [True, False]
    assert [source.folder.name for source in found(survey, builds).sources] == [
        "000009.partial",
        "000008.partial",
        "000007",
    ]


def test_parts_of_a_build_are_found_without_its_faults(survey):
    _, settings, run_dir = survey
    build = build_of(run_dir, settings, [stars(5), stars(4, 6)], faults=(3, 7))
    (source,) = found(survey, [build]).sources
    folder = run_dir / "generations/000008.partial/parts"
    assert source.files == tuple(
        EarlierFile(
            folder / f"catalogue/part-{part:06d}.parquet", folder / f"draws/part-{part:06d}.parquet", "catalogue"
        )
        for part in range(2)
    )
    assert (source.published, source.parts) == (False, (0, 1))
    kinds = {star: DATA if star % 2 else CATALOGUE for star in range(1, 10) if star not in (3, 7)}
    assert kinds_of(source) == {hash_of(star): kind for star, kind in kinds.items()}
    for record in np.concatenate(list(index_records(source, 3))):
        if record["kind"] == CATALOGUE:
            table = pq.read_table(source.files[record["source"] - 3].path)
            assert hash_of(table["star_id"][int(record["row"])].as_py()) == record["id_hash"]


def test_parts_that_are_damaged_or_gone_are_left_out(survey):
    _, settings, run_dir = survey
    build = build_of(run_dir, settings, [stars(3), stars(3, 4), stars(3, 7)])
    folder = run_dir / "generations/000008.partial/parts"
    damaged, gone = folder / "draws/part-000000.parquet", folder / "rejected/part-000002.parquet"
    whole = damaged.read_bytes()
    damaged.write_bytes(whole[:50] + bytes([whole[50] ^ 1]) + whole[51:])
    gone.unlink()
    (source,) = found(survey, [build]).sources
    assert source.parts == (1,)
    (folder / "index/part-000001.parquet").unlink()
    assert found(survey, [build]).sources == ()


def test_a_build_without_columns_that_are_asked_for_now_is_left_out(survey):
    _, settings, run_dir = survey
    then = settings_for(settings.input.tables, run_dir, output__per_band="residual", **DRAWS)
    build = build_of(run_dir, then, [stars(3)])
    assert found(survey, [build]).sources == ()
    assert len(found(survey, [build], output__per_band="none").sources) == 1


def test_reading_through_parts_can_be_stopped(survey):
    source, settings, run_dir = survey
    build = build_of(run_dir, settings, [stars(3), stars(3, 4)])

    def stop():
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        find_earlier(run_dir, [build], settings, hashes_of(settings, NoModel()), source, refit_all=False, check=stop)


def test_builds_of_another_fit_are_left_out(survey):
    build = build_of(survey[2], survey[1], [stars(3)])
    assert len(found(survey, [build]).sources) == 1
    assert found(survey, [build], run__seed=5).sources == ()


# ---- the plan that comes of it


def notes_of(tmp_path, rows):
    columns = note_columns(read_notes(tmp_path / "plan" / "notes", 0, rows), np.arange(rows))
    return columns["_source"].tolist(), columns["_source_row"].tolist()


def test_a_plan_takes_the_newest_result_of_each_row_and_counts(tmp_path, survey):
    source, settings, run_dir = survey
    old = with_column(stars(ROWS), "parallax", [99.0, *stars(ROWS)["parallax"].to_pylist()[1:]])
    gone = stars(2, 101)
    publish(run_dir, settings, pa.concat_tables([old.slice(0, 10), gone]), process=pass_through)
    build = build_of(run_dir, settings, [stars(2, 51), stars(ROWS).slice(2, 2)], process=pass_through)
    plan = planned(tmp_path, source, settings, earlier=found(survey, [build]))
    assert plan.rows == RowCounts(new=2, changed=1, kept=9, gone=2)
    # Rows are taken from the second part of the build and from the published file: the others are not listed.
    assert [file.path.relative_to(run_dir / "generations").as_posix() for file in plan.earlier] == [
        "000008.partial/parts/catalogue/part-000001.parquet",
        "000007/catalogue/part-000000.parquet",
    ]
    sources, rows = notes_of(tmp_path, ROWS)
    assert sources == [-1, 1, 0, 0, 1, 1, 1, 1, 1, 1, -1, -1]
    for row, (number, place) in enumerate(zip(sources, rows, strict=True)):
        if number >= 0:
            assert pq.read_table(plan.earlier[number].path)["star_id"][place].as_py() == row + 1
    assert [unit.reused for unit in plan.units] == [9]


def test_rows_set_aside_for_a_fault_stay_so_until_they_are_retried(tmp_path, survey):
    source, settings, run_dir = survey
    publish(run_dir, settings, stars(ROWS), faults=(3,))
    plan = planned(tmp_path, source, settings, earlier=found(survey))
    assert plan.rows == RowCounts(kept=ROWS - 1, failed=1)
    assert [file.table for file in plan.earlier] == ["catalogue", "rejected"]
    sources, _ = notes_of(tmp_path, ROWS)
    assert sources == [1 if star == 3 else -1 if star % 2 else 0 for star in range(1, ROWS + 1)]
    again = planned(tmp_path / "again", source, settings, earlier=found(survey), retry_failed=True)
    assert again.rows == RowCounts(kept=ROWS - 1, retried=1)
    assert [file.table for file in again.earlier] == ["catalogue"]
    assert again.units[0].reused == ROWS // 2


def test_where_every_row_is_refitted_changed_and_gone_rows_are_still_told(tmp_path, survey):
    source, settings, run_dir = survey
    publish(run_dir, settings, stars(ROWS, 3))
    plan = planned(tmp_path, source, settings, earlier=found(survey, refit_all=True))
    assert plan.rows == RowCounts(new=2, changed=ROWS - 2, gone=2)
    assert (plan.why, plan.earlier) == ("--refit-all was given", ())


def test_files_renamed_split_merged_or_grouped_otherwise_leave_nothing_to_fit(tmp_path, survey):
    _, settings, run_dir = survey
    publish(run_dir, settings, stars(ROWS), process=pass_through)
    pieces = [stars(ROWS).slice(7), stars(ROWS).slice(0, 3), stars(ROWS).slice(3, 4)]
    for number, tables in enumerate([pieces, [stars(ROWS)]]):
        folder = tmp_path / f"other{number}"
        source, moved = written(folder, tables, row_group_size=2, output=run_dir, **DRAWS)
        plan = planned(tmp_path / f"plan{number}", source, moved, earlier=found((source, moved, run_dir)))
        assert plan.rows == RowCounts(kept=ROWS)
        assert sum(unit.reused for unit in plan.units) == ROWS
        assert sum(unit.selected for unit in plan.units) == ROWS


def test_an_index_may_hold_hive_folders(survey):
    source, settings, run_dir = survey
    folder = publish(run_dir, settings, stars(ROWS), process=pass_through)
    facts = json.loads((folder / "run.json").read_text())
    for table in ("catalogue", "draws"):
        (folder / table / "field=T1").mkdir()
        (folder / table / "part-000000.parquet").rename(folder / table / "field=T1" / "part-000000.parquet")
    facts["files"] = {
        name.replace("/", "/field=T1/") if Path(name).parent.name in ("catalogue", "draws") else name: file
        for name, file in facts["files"].items()
    }
    (folder / "run.json").write_text(json.dumps(facts))
    index = pq.read_table(folder / "index/part-000000.parquet")
    renamed = pa.array(["catalogue/field=T1/part-000000.parquet"] * ROWS)
    put(folder, "index/part-000000.parquet", index.set_column(2, "file", renamed))
    (source,) = found(survey).sources
    records = np.concatenate(list(index_records(source, 0)))
    assert set(records["kind"].tolist()) == {CATALOGUE}
    assert {source.files[number].draws.parent.name for number in records["source"]} == {"field=T1"}

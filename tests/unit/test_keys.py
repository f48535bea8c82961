import os

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from planning import planned, written
from small_survey import settings_for, stars, with_column
from starkiln.engine.keys import inputs_key, plan_key
from starkiln.errors import EnvironmentTrouble
from starkiln.tables.source import open_source

HASHES = {"fit_key": "one"}
PUBLISHED = {"number": 3, "sha256": "abc"}


def keys_of(settings, hashes=HASHES, published=PUBLISHED):
    source = open_source(settings)
    return inputs_key(source, settings, hashes), plan_key(source, settings, hashes, published)


@pytest.fixture
def folder(tmp_path):
    written(tmp_path / "input", [stars(20), stars(10, 21)])
    for path in (tmp_path / "input").iterdir():
        os.utime(path, ns=(1, 1))
    return tmp_path / "input"


@pytest.mark.parametrize(
    "changes",
    [
        {"input__carry": ["ra"]},
        {"input__where": [["star_id", ">", 3]]},
        {"output__per_band": "none"},
        {"output__layout": "hive"},
        {"model__extinction__scale": "dec"},
    ],
)
def test_settings_that_show_in_a_result_change_both_keys(folder, changes):
    before, after = keys_of(settings_for(folder)), keys_of(settings_for(folder, **changes))
    assert before[0] != after[0]
    assert before[1] != after[1]


def test_the_key_of_a_fit_changes_both_keys(folder):
    before, after = keys_of(settings_for(folder)), keys_of(settings_for(folder), {"fit_key": "two"})
    assert before[0] != after[0]
    assert before[1] != after[1]


def test_only_packing_does_not_touch_the_plan(folder):
    before, after = keys_of(settings_for(folder)), keys_of(settings_for(folder, output__rows_per_file=7))
    assert before[0] != after[0]
    assert before[1] == after[1]


@pytest.mark.parametrize(
    "changes",
    [
        {"compute__workers": 7},
        {"compute__rows_per_part": 3},
        {"compute__memory_per_worker": "4GB"},
        {"compute__scratch": "/elsewhere"},
        {"run__keep_generations": 5},
    ],
)
def test_settings_of_the_machine_change_no_key(folder, changes):
    assert keys_of(settings_for(folder)) == keys_of(settings_for(folder, **changes))


def test_the_published_generation_is_what_a_plan_stands_on(folder):
    settings = settings_for(folder)
    seen = [keys_of(settings, published=base) for base in (None, PUBLISHED, PUBLISHED | {"number": 4})]
    seen.append(keys_of(settings, published=PUBLISHED | {"sha256": "x"}))
    assert len({inputs for inputs, _ in seen}) == 1
    assert len({plan for _, plan in seen}) == 4


def test_files_that_are_touched_added_renamed_or_skipped_change_both_keys(folder):
    settings = settings_for(folder, input__on_bad_file="skip")
    seen = [keys_of(settings)]
    os.utime(folder / "a.parquet", ns=(2, 2))
    seen.append(keys_of(settings))
    (folder / "b.parquet").rename(folder / "c.parquet")
    seen.append(keys_of(settings))
    pq.write_table(stars(1, 50), folder / "d.parquet")
    seen.append(keys_of(settings))
    (folder / "e.parquet").write_bytes(b"PAR1")
    seen.append(keys_of(settings))
    for kind in range(2):
        assert len({keys[kind] for keys in seen}) == 5


def test_a_list_of_ids_counts_by_its_stamp(folder, tmp_path):
    only = tmp_path / "only.parquet"
    pq.write_table(stars(2).select(["star_id"]), only)
    settings = settings_for(folder, input__only=str(only))
    before = keys_of(settings)
    os.utime(only, ns=(1, 1))
    assert keys_of(settings)[0] != before[0]


def test_an_input_that_is_gone_is_trouble(folder):
    source = open_source(settings_for(folder))
    (folder / "a.parquet").unlink()
    with pytest.raises(EnvironmentTrouble, match=r"a\.parquet: No such file"):
        inputs_key(source, settings_for(folder), HASHES)


# ---- content


def content(tmp_path, name, tables, **changes):
    source, settings = written(tmp_path / name, tables, **changes)
    return planned(tmp_path / f"plan-{name}", source, settings).content


def test_the_content_of_an_input_is_what_shows_in_a_result(tmp_path):
    changes = {"input__carry": ["ra"]}
    tables = [stars(20), stars(10, 21)]
    told = {"as it was": content(tmp_path, "first", tables, **changes)}
    assert content(tmp_path, "again", tables, **changes) == told["as it was"]
    told["value"] = content(tmp_path, "value", [with_column(tables[0], "parallax", [1.0] * 20), tables[1]], **changes)
    told["carried"] = content(tmp_path, "carried", [with_column(tables[0], "ra", [1.0] * 20), tables[1]], **changes)
    no_id = with_column(tables[0], "star_id", pa.array([None, *range(2, 21)], pa.int64()))
    told["id"] = content(tmp_path, "id", [no_id, tables[1]], **changes)
    told["order"] = content(tmp_path, "order", tables[::-1], **changes)
    told["split"] = content(tmp_path, "split", [tables[0].slice(0, 5), tables[0].slice(5), tables[1]], **changes)
    told["carries less"] = content(tmp_path, "less", tables)
    unit = with_column(tables[0], "ra", tables[0]["ra"], {"unit": "deg"})
    told["unit"] = content(tmp_path, "unit", [unit, tables[1]], **changes)
    filtered = {"input__where": [["star_id", "!=", 1]]} | changes
    told["filtered"] = content(tmp_path, "filtered", tables, **filtered)
    assert len(set(told.values())) == len(told)


def test_columns_that_are_not_used_do_not_count_for_the_content(tmp_path):
    before = content(tmp_path, "first", [stars(20)])
    assert content(tmp_path, "other", [with_column(stars(20), "dec", [1.0] * 20)]) == before


def test_a_file_without_a_selected_row_does_not_count_for_the_content(tmp_path):
    changes = {"input__where": [["star_id", "<", 21]]}
    before = content(tmp_path, "first", [stars(20)], **changes)
    assert content(tmp_path, "more", [stars(20), stars(10, 21)], **changes) == before

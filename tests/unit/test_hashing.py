import hashlib
import os
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planning import written
from small_survey import band, settings_for, stars, with_column
from starkiln.engine.hashing import Carried, file_key, hash_file, is_whole, read_records
from starkiln.errors import EnvironmentTrouble
from starkiln.tables.hashes import id_digests, row_hashes
from starkiln.tables.source import open_source


def hashed(tmp_path, tables, index=0, **changes):
    source, settings = written(tmp_path / "input", tables, **changes)
    folder = tmp_path / "planning"
    folder.mkdir()
    file = hash_file(source, index, settings, folder, lambda rows: None)
    return file, folder, settings


def test_records_are_of_selected_rows_with_an_id(tmp_path):
    selected = np.array(stars(70)["dec"]) > 0
    nameless = int(np.flatnonzero(selected)[3])
    table = with_column(stars(70), "star_id", pa.array(range(70), pa.int64(), mask=np.arange(70) == nameless))
    file, folder, settings = hashed(tmp_path, [table], input__where=[["dec", ">", 0.0]])
    records = np.concatenate(list(read_records(folder, file)))
    listed = np.flatnonzero(selected & (np.arange(70) != nameless))
    assert records["row"].tolist() == listed.tolist()
    assert records["row_hash"].tolist() == row_hashes(table, settings)[listed].tolist()
    digests, _ = id_digests(table["star_id"])
    assert np.stack([records["id_hash"], records["more_hash"]], axis=1).tolist() == digests[listed].tolist()
    assert (file.rows, file.selected, file.without_id) == (70, selected.sum(), 1)
    assert file.groups == tuple(selected[first : first + 30].sum() for first in (0, 30, 60))
    data = (folder / f"{file.key}.bin").read_bytes()
    assert (file.bytes, file.sha256) == (len(data), hashlib.sha256(data).hexdigest())
    assert is_whole(folder, file)


def test_a_file_that_changes_while_it_is_read_is_trouble_and_leaves_nothing(tmp_path):
    source, settings = written(tmp_path / "input", [stars(40)])
    folder = tmp_path / "planning"
    folder.mkdir()
    with pytest.raises(EnvironmentTrouble, match=r"a\.parquet has changed while it was read"):
        hash_file(source, 0, settings, folder, lambda rows: os.utime(source.files[0].path, ns=(1, 1)))
    assert not list(folder.iterdir())


def test_an_end_while_reading_leaves_nothing(tmp_path):
    source, settings = written(tmp_path / "input", [stars(40)])
    folder = tmp_path / "planning"
    folder.mkdir()

    def stop(rows):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        hash_file(source, 0, settings, folder, stop)
    assert not list(folder.iterdir())


def keys(settings):
    source = open_source(settings)
    return [file_key(source, index, settings) for index in range(len(source.files))]


@pytest.mark.parametrize(
    "changes",
    [
        {"input__carry": ["ra"]},
        {"input__where": [["star_id", ">", 3]]},
        {"input__parallax__unit": "arcsec"},
        {"input__parallax__zero_point": "dec"},
        {"input__photometry": [band("panstarrs_g", value="ra"), band("panstarrs_r"), band("panstarrs_i")]},
    ],
)
def test_settings_that_change_a_files_records_change_its_key(tmp_path, changes):
    _, settings = written(tmp_path / "input", [stars(3)])
    assert keys(settings) != keys(settings_for(tmp_path / "input", **changes))


@pytest.mark.parametrize("use", ["bad", "limit", "value"])
def test_which_column_stands_for_what_counts_for_the_key(tmp_path, use):
    table = with_column(with_column(stars(3), "one", [1] * 3), "two", [1] * 3)
    bands = [[band("panstarrs_g", **{use: name}), band("panstarrs_r"), band("panstarrs_i")] for name in ("one", "two")]
    _, settings = written(tmp_path / "input", [table], input__photometry=bands[0])
    other = settings_for(tmp_path / "input", input__photometry=bands[1])
    # The schema of the columns used differs, too; here they are the same.
    schema = open_source(settings_for(tmp_path / "input", input__carry=["one", "two"])).schema
    seen = [file_key(replace(open_source(one), schema=schema), 0, one) for one in (settings, other)]
    assert seen[0] != seen[1]


def test_other_settings_and_other_files_do_not_change_a_files_key(tmp_path):
    folder = tmp_path / "input"
    _, settings = written(folder, [stars(3)])
    before = keys(settings)
    pq.write_table(stars(3, 10), folder / "b.parquet")
    changed = settings_for(folder, run__seed=5, output__per_band="none", compute__rows_per_part=10)
    assert keys(changed)[0] == before[0]
    assert keys(changed)[1] != before[0]


def test_a_file_that_is_touched_or_replaced_has_another_key(tmp_path):
    folder = tmp_path / "input"
    _, settings = written(folder, [stars(3)])
    os.utime(folder / "a.parquet", ns=(1, 1))
    seen = [keys(settings)]
    os.utime(folder / "a.parquet", ns=(2, 2))
    seen.append(keys(settings))
    assert seen[0] != seen[1]


def test_a_list_of_ids_that_changes_changes_the_key(tmp_path):
    only = tmp_path / "only.parquet"
    pq.write_table(stars(2).select(["star_id"]), only)
    _, settings = written(tmp_path / "input", [stars(3)], input__only=str(only))
    before = keys(settings)
    os.utime(only, ns=(1, 1))
    assert keys(settings) != before


# ---- carried columns

COLUMNS = {
    "int": pa.array([3, None, -1, 0, 7], pa.int32()),
    "float": pa.array([1.5, np.nan, None, -0.0, 2.0], pa.float32()),
    "string": pa.array(["α", None, "", "bc", "b"]),
    "bool": pa.array([True, None, False, True, False]),
    "time": pa.array([1, None, 3, 4, 5], pa.timestamp("us", tz="UTC")),
}
TABLE = pa.table(COLUMNS)


def digest_of(table, cuts=()):
    carried = Carried(table.column_names)
    edges = [0, *cuts, table.num_rows]
    for first, last in pairwise(edges):
        carried.add(table.slice(first, last - first))
    return carried.digest()


@given(st.lists(st.integers(0, 5), max_size=4).map(sorted))
def test_batches_do_not_count_for_carried_columns(cuts):
    assert digest_of(TABLE, cuts) == digest_of(TABLE)


@pytest.mark.parametrize("name", COLUMNS)
@pytest.mark.parametrize("row", range(5))
def test_every_carried_value_and_null_counts(name, row):
    values = TABLE[name].to_pylist()
    other = next(value for value in reversed(values) if value is not None and value != values[row])
    seen = {digest_of(TABLE)}
    for replacement in {other, None} - {values[row]}:
        changed = pa.array([*values[:row], replacement, *values[row + 1 :]], TABLE[name].type)
        seen.add(digest_of(with_column(TABLE, name, changed)))
    assert len(seen) == 2 + (values[row] is not None)


def test_strings_that_run_into_each_other_are_told_apart():
    assert digest_of(pa.table({"a": ["ab", "c"]})) != digest_of(pa.table({"a": ["a", "bc"]}))
    assert digest_of(pa.table({"a": [None, ""]})) != digest_of(pa.table({"a": ["", None]}))


def test_what_lies_under_a_null_does_not_count():
    hidden = [
        pa.Array.from_buffers(pa.int64(), 2, [pa.py_buffer(b"\1"), pa.py_buffer(np.array([5, k]))]) for k in (1, 2)
    ]
    assert hidden[0].to_pylist() == [5, None]
    assert digest_of(pa.table({"a": hidden[0]})) == digest_of(pa.table({"a": hidden[1]}))

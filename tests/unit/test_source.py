"""The input tables: what is found, what is refused and how, and which rows come out."""

import datetime
import os

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st

from small_survey import settings_for, stars, with_column
from starkiln.errors import EnvironmentTrouble, InputError
from starkiln.tables.discovery import find_files
from starkiln.tables.source import open_source, read_rows
from starkiln.tables.votable import with_header


def write(path, table, **options):
    path.parent.mkdir(parents=True, exist_ok=True)
    pq.write_table(table, path, **options)
    return path


def all_pieces(source):
    return [(k, g) for k, file in enumerate(source.files) for g in range(len(file.row_group_rows))]


def read_all(settings, columns=None, batch_rows=1000):
    source = open_source(settings)
    columns = settings.used_columns() if columns is None else columns
    batches = list(read_rows(source, settings, all_pieces(source), columns, batch_rows))
    assert sum(batch.read for batch in batches) == source.rows
    assert all(batch.read == batch.filtered + len(batch.table) for batch in batches)
    return pa.concat_tables([batch.table for batch in batches])


def refusal(settings):
    with pytest.raises(InputError) as caught:
        open_source(settings)
    assert caught.value.exit_code == 3
    return str(caught.value)


# ---- finding files


def test_folder_is_searched_to_any_depth_in_order_of_names(tmp_path):
    for name in ("b.parquet", "a/z.parquet", "a/.hidden.parquet", "_tmp/c.parquet", ".git/d.parquet"):
        write(tmp_path / name, stars(2))
    (tmp_path / "README.txt").write_text("notes")
    (tmp_path / "part.parquet.tmp").write_text("unfinished")
    root, files = find_files(str(tmp_path))
    assert [file.relative_to(root).as_posix() for file in files] == ["a/z.parquet", "b.parquet"]


def test_glob_names_are_relative_to_the_part_without_wildcards(tmp_path):
    for name in ("north/a.parquet", "south/b.pq", "south/_c.parquet"):
        write(tmp_path / name, stars(2))
    root, files = find_files(f"{tmp_path}/*th/*")
    assert root == tmp_path
    assert [file.name for file in files] == ["a.parquet", "b.pq"]
    assert find_files(f"{tmp_path}/nor*")[1] == [tmp_path / "north" / "a.parquet"]
    assert len(find_files(f"{tmp_path}/**/*.p*q*")[1]) == 2


def test_file_whose_name_looks_like_a_pattern_is_that_file(tmp_path):
    path = write(tmp_path / "stars[1].parquet", stars(3))
    assert find_files(str(path)) == (tmp_path, [path])


@pytest.mark.parametrize("tables", ["nowhere", "no*", ""])
def test_nothing_found_is_said(tmp_path, tables):
    with pytest.raises(InputError, match=r"input\.tables: "):
        find_files(str(tmp_path / tables))


def test_input_row_and_file_count_through_row_groups(tmp_path):
    write(tmp_path / "a.parquet", stars(10), row_group_size=4)
    write(tmp_path / "b.parquet", stars(3, first_id=100))
    table = read_all(settings_for(tmp_path), batch_rows=3)
    assert table["_input_row"].to_pylist() == [*range(10), *range(3)]
    assert table["_input_file"].to_pylist() == ["a.parquet"] * 10 + ["b.parquet"] * 3
    assert table["star_id"].to_pylist() == [*range(1, 11), 100, 101, 102]


def test_pieces_come_in_the_order_asked_for(tmp_path):
    write(tmp_path / "a.parquet", stars(6), row_group_size=2)
    settings = settings_for(tmp_path)
    source = open_source(settings)
    batches = read_rows(source, settings, [(0, 2), (0, 0)], ["star_id"], 10)
    assert [batch.table["star_id"].to_pylist() for batch in batches] == [[5, 6], [1, 2]]
    assert source.files[0].row_group_rows == (2, 2, 2)


def test_only_the_columns_asked_for_come_out(tmp_path):
    write(tmp_path / "a.parquet", stars(6))
    settings = settings_for(tmp_path, input__where=[["ra", ">=", 0]], input__carry=["dec"])
    table = read_all(settings, ["dec", "star_id"])
    assert table.column_names == ["dec", "star_id", "_input_file", "_input_row"]


# ---- hive layout


@pytest.fixture
def hive(tmp_path):
    for field, first in (("T1", 1), ("T2", 11), ("T 3", 21)):
        folder = f"field={field.replace(' ', '%20')}"
        write(tmp_path / folder / "year=2024" / "a.parquet", stars(10, first))
    return tmp_path


def test_partition_values_are_columns(hive):
    settings = settings_for(hive, input__carry=["field", "year"], input__where=[["field", "in", ["T1", "T 3"]]])
    source = open_source(settings)
    assert source.schema.field("field").type == pa.string()
    assert source.schema.field("year").type == pa.int64()
    table = read_all(settings)
    assert set(table["star_id"].to_pylist()) == {*range(1, 11), *range(21, 31)}
    assert set(table["field"].to_pylist()) == {"T1", "T 3"}
    assert table["year"].to_pylist() == [2024] * 20


def test_files_of_other_partitions_are_not_opened_for_rows(hive):
    settings = settings_for(hive, input__where=[["field", "=", "T2"]])
    source = open_source(settings)
    broken = next(file for file in source.files if file.partition["field"] == "T1")
    columns = ["star_id"]
    with broken.path.open("r+b") as file:
        file.write(b"\xff" * 100)
    batches = list(read_rows(source, settings, all_pieces(source), columns, 100))
    assert [(batch.read, batch.filtered) for batch in batches] == [(10, 10), (10, 10), (10, 0)]


def test_null_partition_and_text_that_is_no_printed_integer(tmp_path):
    for value in ("07", "__HIVE_DEFAULT_PARTITION__"):
        write(tmp_path / f"tile={value}" / "a.parquet", stars(2))
    table = read_all(settings_for(tmp_path, input__carry=["tile"]))
    assert table["tile"].to_pylist() == ["07", "07", None, None]
    only_known = settings_for(tmp_path, input__where=[["tile", "!=", "08"]])
    assert len(read_all(only_known)) == 2


def test_column_of_the_file_comes_before_the_folder(tmp_path):
    write(tmp_path / "ra=5" / "a.parquet", with_column(stars(2), "ra", [1.5, 2.5]))
    assert read_all(settings_for(tmp_path, input__carry=["ra"]))["ra"].to_pylist() == [1.5, 2.5]


# ---- bad files


def test_all_bad_files_are_listed_at_once(tmp_path):
    good = stars(5)
    write(tmp_path / "a.parquet", good)
    whole = write(tmp_path / "truncated.parquet", good).read_bytes()
    (tmp_path / "truncated.parquet").write_bytes(whole[:-20])
    (tmp_path / "empty.parquet").write_bytes(b"")
    write(tmp_path / "missing.parquet", good.rename_columns({"panstarrs_g": "panstars_g"}))
    write(tmp_path / "drift.parquet", with_column(good, "parallax", good["parallax"].cast(pa.float32())))
    unit = good["panstarrs_r"]
    write(tmp_path / "unit.parquet", with_column(good, "panstarrs_r", unit, {"unit": "uJy"}))
    os.symlink(tmp_path / "nowhere", tmp_path / "link.parquet")
    text = refusal(settings_for(tmp_path))
    assert text.startswith("6 of 7 input files of ")
    lines = {line.split(":")[0].strip(): line for line in text.split("\n")[1:]}
    assert set(lines) == {f"{name}.parquet" for name in ("truncated", "empty", "missing", "drift", "unit", "link")}
    assert "no whole Parquet file" in lines["truncated.parquet"]
    assert "no column 'panstarrs_g' (did you mean 'panstars_g'?)" in lines["missing.parquet"]
    assert "input.photometry panstarrs_g value" in lines["missing.parquet"]
    assert "'parallax' holds float, but double in a.parquet" in lines["drift.parquet"]
    assert "in 'uJy' by the file's metadata" in lines["unit.parquet"]
    assert "'nJy'" in lines["unit.parquet"]


def test_a_fault_of_every_file_is_told_once(tmp_path):
    for k in range(5):
        write(tmp_path / f"{k}.parquet", stars(2).drop_columns(["parallax"]))
    lines = refusal(settings_for(tmp_path)).split("\n")
    assert len(lines) == 2
    assert lines[1].strip().startswith("each of them: has no column 'parallax'")


def test_bad_files_can_be_skipped_and_are_named(tmp_path):
    write(tmp_path / "a.parquet", stars(5))
    (tmp_path / "b.parquet").write_bytes(b"PAR1")
    source = open_source(settings_for(tmp_path, input__on_bad_file="skip"))
    assert [file.name for file in source.files] == ["a.parquet"]
    assert [file.name for file in source.skipped] == ["b.parquet"]
    assert "no whole Parquet file" in source.skipped[0].reason


def test_skipping_leaves_at_least_one_file(tmp_path):
    (tmp_path / "b.parquet").write_bytes(b"PAR1")
    assert "1 of 1 input files" in refusal(settings_for(tmp_path, input__on_bad_file="skip"))


def test_table_without_rows_is_refused(tmp_path):
    write(tmp_path / "a.parquet", stars(0))
    assert "no row" in refusal(settings_for(tmp_path))


def test_column_that_is_there_twice_is_refused(tmp_path):
    table = stars(2)
    write(tmp_path / "a.parquet", table.append_column(table.schema.field("parallax"), table["parallax"]))
    assert "has 2 columns 'parallax'" in refusal(settings_for(tmp_path))


@pytest.mark.parametrize(
    ("column", "values", "changes", "message"),
    [
        ("star_id", [1.0, 2.0], {}, "input.id needs integers or strings"),
        ("panstarrs_g", ["1", "2"], {}, "panstarrs_g value needs numbers"),
        ("panstarrs_g", [True, False], {}, "panstarrs_g value needs numbers"),
        ("ra", [b"1", b"2"], {"input__carry": ["ra"]}, "input.carry needs integers, floats"),
        ("ra", [[1.0], [2.0]], {"input__carry": ["ra"]}, "input.carry needs integers, floats"),
        ("ra", [1.0, 2.0], {"input__photometry": "bad"}, "panstarrs_g bad needs booleans"),
        ("star_id", pa.array([1, 2], pa.decimal128(20, 0)), {}, "input.id needs integers or strings"),
        ("ra", pa.array([1, 2], pa.decimal128(9, 4)), {"input__carry": ["ra"]}, "input.carry needs integers"),
        (
            "_source",
            [1, 2],
            {"input__carry": ["_source"]},
            "'_source' has a name that starkiln needs for itself: rename it",
        ),
    ],
)
def test_types_that_a_column_cannot_have(tmp_path, column, values, changes, message):
    if changes.get("input__photometry") == "bad":
        photometry = [{"passband": "panstarrs_g", "value": "panstarrs_g", "error": "panstarrs_g_error"}]
        changes = {"input__photometry": [photometry[0] | {"unit": "nJy", "bad": "ra"}], "input__min_bands": 1}
    write(tmp_path / "a.parquet", with_column(stars(2), column, values))
    assert message in refusal(settings_for(tmp_path, **changes))


# ---- types


@pytest.mark.parametrize(
    "kind",
    [pa.string(), pa.large_string(), pa.string_view(), pa.dictionary(pa.int8(), pa.string())],
    ids=str,
)
def test_every_kind_of_string_comes_out_as_string(tmp_path, kind):
    names = pa.array(["α Cen", None, "Wolf 359"])
    for letter in "ab":
        table = with_column(stars(3), "name", names if letter == "b" else names.cast(kind))
        write(tmp_path / f"{letter}.parquet", table)
    source = open_source(settings_for(tmp_path, input__carry=["name"]))
    assert source.schema.field("name").type == pa.string()
    table = read_all(settings_for(tmp_path, input__carry=["name"]))
    assert table["name"].type == pa.string()
    assert table["name"].to_pylist() == ["α Cen", None, "Wolf 359"] * 2


def test_large_integers_next_to_nulls_stay_exact(tmp_path):
    ids = [2**63 - 1, None, 2**53 + 1]
    write(tmp_path / "a.parquet", with_column(stars(3), "star_id", pa.array(ids, pa.int64())))
    assert read_all(settings_for(tmp_path))["star_id"].to_pylist() == ids
    big = with_column(stars(2), "star_id", pa.array([2**64 - 1, 0], pa.uint64()))
    write(tmp_path / "a.parquet", big)
    table = read_all(settings_for(tmp_path, input__where=[["star_id", "=", 2**64 - 1]]))
    assert table["star_id"].to_pylist() == [2**64 - 1]
    assert table["star_id"].type == pa.uint64()


def test_decimal_values_come_out_as_float64(tmp_path):
    prices = pa.array(["12.5", None], pa.string()).cast(pa.decimal128(10, 3))
    write(tmp_path / "a.parquet", with_column(stars(2), "panstarrs_g", prices))
    column = read_all(settings_for(tmp_path, input__where=[["panstarrs_g", "<", 20.0]]))["panstarrs_g"]
    assert (column.type, column.to_pylist()) == (pa.float64(), [12.5])


def test_file_of_nulls_without_a_type_takes_the_type_of_the_others(tmp_path):
    write(tmp_path / "a.parquet", with_column(stars(2), "parallax", pa.nulls(2)))
    write(tmp_path / "b.parquet", stars(2))
    column = read_all(settings_for(tmp_path))["parallax"]
    assert column.type == pa.float64()
    assert column.null_count == 2


def test_column_that_no_file_gives_a_type_is_refused(tmp_path):
    write(tmp_path / "a.parquet", with_column(stars(2), "parallax", pa.nulls(2)))
    assert "'parallax' has no value in any file" in refusal(settings_for(tmp_path))


def test_column_names_with_dots_and_prefixes(tmp_path):
    table = with_column(with_column(stars(2), "pos.ra", [1.0, 2.0]), "pos", [3.0, 4.0])
    write(tmp_path / "a.parquet", table)
    out = read_all(settings_for(tmp_path, input__carry=["pos", "pos.ra"]))
    assert (out["pos"].to_pylist(), out["pos.ra"].to_pylist()) == ([3.0, 4.0], [1.0, 2.0])


# ---- units


@pytest.mark.parametrize("unit", ["nJy", "1e-9 Jy", "nanoJy", "1e-32 erg / (s cm2 Hz)"])
def test_same_unit_in_other_words_is_accepted(tmp_path, unit):
    table = stars(2)
    write(tmp_path / "a.parquet", with_column(table, "panstarrs_g", table["panstarrs_g"], {"unit": unit}))
    if unit == "nanoJy":  # no unit that astropy knows, and not the text of the settings
        assert "'nanoJy' by the file's metadata" in refusal(settings_for(tmp_path))
    else:
        assert open_source(settings_for(tmp_path)).rows == 2


@pytest.mark.parametrize(
    ("unit", "system", "accepted"),
    [
        ("mag", "AB", True),
        ("mag(AB)", "AB", True),
        ("mag(AB)", "Vega", False),
        ("mag(ST)", "AB", False),
        ("Jy", "AB", False),
    ],
)
def test_magnitudes(tmp_path, unit, system, accepted):
    table = stars(2)
    write(tmp_path / "a.parquet", with_column(table, "panstarrs_g", table["panstarrs_g"], {"unit": unit}))
    photometry = {
        "passband": "panstarrs_g",
        "value": "panstarrs_g",
        "error": "panstarrs_g_error",
        "unit": "mag",
    }
    settings = settings_for(tmp_path, input__photometry=[photometry | {"system": system}], input__min_bands=1)
    if accepted:
        assert open_source(settings).rows == 2
    else:
        assert repr(unit) in refusal(settings)


def test_unit_of_a_votable_header_is_checked(tmp_path):
    table = stars(2)
    table = with_column(table, "parallax", table["parallax"], {"unit": "arcsec"})
    schema = with_header(table.schema, {})
    bare = pa.schema([field.remove_metadata() for field in schema], metadata=schema.metadata)
    write(tmp_path / "a.parquet", table.cast(bare))
    assert "'parallax' is in 'arcsec'" in refusal(settings_for(tmp_path))


def test_carried_column_whose_unit_changes_between_files(tmp_path):
    for name, unit in (("a", "deg"), ("b", "rad")):
        table = with_column(stars(2), "ra", [1.0, 2.0], {"unit": unit})
        write(tmp_path / f"{name}.parquet", table)
    assert "'ra' is in 'rad', but in 'deg' in a.parquet" in refusal(settings_for(tmp_path, input__carry=["ra"]))


def test_carried_column_keeps_its_metadata(tmp_path):
    notes = {"unit": "deg", "ucd": "pos.eq.ra", "description": "Right ascension"}
    write(tmp_path / "a.parquet", with_column(stars(2), "ra", [1.0, 2.0], notes))
    field = open_source(settings_for(tmp_path, input__carry=["ra"])).schema.field("ra")
    assert {key.decode(): text.decode() for key, text in field.metadata.items()} == notes


# ---- filters


@pytest.fixture
def colours(tmp_path):
    table = with_column(stars(6), "colour", pa.array([0.1, 0.2, 0.3, None, np.nan, 0.1], pa.float32()))
    table = with_column(table, "count", pa.array([1, 2, 3, None, 5, 6], pa.int16()))
    table = with_column(table, "name", ["a", "b", "c", None, "e", "f"])
    table = with_column(table, "when", pa.array([datetime.datetime(2024, 1, day) for day in range(1, 7)]))
    write(tmp_path / "a.parquet", table, row_group_size=2)
    return tmp_path


@pytest.mark.parametrize(
    ("where", "ids"),
    [
        ([["colour", "=", 0.1]], [1, 6]),
        ([["colour", "in", [0.1, 0.3]]], [1, 3, 6]),
        ([["colour", "<=", 0.2]], [1, 2, 6]),
        ([["colour", "!=", 0.1]], [2, 3, 5]),
        ([["colour", "not in", [0.1]]], [2, 3, 5]),
        ([["count", ">=", 3], ["count", "<", 6.0]], [3, 5]),
        ([["name", "==", "b"]], [2]),
        ([["name", "not in", ["a", "b"]]], [3, 5, 6]),
        ([["when", ">", datetime.datetime(2024, 1, 4)]], [5, 6]),
        ([[["name", "=", "a"]], [["count", ">", 4], ["colour", "=", 0.1]]], [1, 6]),
        ([[["name", "=", "a"]], [["count", "!=", 2]]], [1, 3, 5, 6]),
    ],
)
def test_where(colours, where, ids):
    assert read_all(settings_for(colours, input__where=where))["star_id"].to_pylist() == ids


@pytest.mark.parametrize(
    ("where", "message"),
    [
        ([["colour", "=", "red"]], "'colour' holds float, which cannot be compared with 'red'"),
        ([["name", "=", 3]], "'name' holds string, which cannot be compared with 3"),
        ([["count", "=", True]], "cannot be compared with True"),
        ([["count", "<", 2.5]], "cannot be compared with 2.5"),
        ([["count", "<", 100000]], "100000 is not a value that column 'count' (int16) can hold"),
        ([["color", "<", 1]], "no column 'color' (did you mean 'colour'?) (input.where)"),
    ],
)
def test_where_that_does_not_fit(colours, where, message):
    assert message in refusal(settings_for(colours, input__where=where))


def test_row_groups_are_pruned_by_their_statistics(colours):
    settings = settings_for(colours, input__where=[["star_id", ">", 4]])
    source = open_source(settings)
    batches = list(read_rows(source, settings, all_pieces(source), ["star_id"], 1))
    assert [(batch.read, batch.filtered) for batch in batches] == [(2, 2), (2, 2), (1, 0), (1, 0)]


def test_not_equal_never_prunes_nan(tmp_path):
    values = pa.array([1.0, np.nan], pa.float64())
    write(tmp_path / "a.parquet", with_column(stars(2), "x", values))
    assert read_all(settings_for(tmp_path, input__where=[["x", "!=", 1.0]]))["star_id"].to_pylist() == [2]


@pytest.mark.parametrize("kind", [pa.int64(), pa.int32(), pa.uint64()])
def test_only(tmp_path, kind):
    ids = pa.array([1, 2, 3, None, 5, 6, 7, 8, None])
    write(tmp_path / "tables" / "a.parquet", with_column(stars(9), "star_id", ids), row_group_size=3)
    write(tmp_path / "targets.parquet", pa.table({"star_id": pa.array([8, 2, None, 2, 77], kind)}))
    settings = settings_for(tmp_path / "tables", input__only=str(tmp_path / "targets.parquet"))
    assert read_all(settings)["star_id"].to_pylist() == [2, 8]


def test_only_that_lists_nothing_keeps_nothing(tmp_path):
    write(tmp_path / "tables" / "a.parquet", stars(3))
    write(tmp_path / "targets.parquet", pa.table({"star_id": pa.array([], pa.int64())}))
    assert len(read_all(settings_for(tmp_path / "tables", input__only=str(tmp_path / "targets.parquet")))) == 0


@pytest.mark.parametrize(
    ("targets", "message"),
    [
        (None, "No such file"),
        (pa.table({"starid": [1]}), "has no column 'star_id' (did you mean 'starid'?)"),
        (pa.table({"star_id": ["1"]}), "holds string, but the ids are int64"),
        (pa.table({"star_id": [1.0]}), "holds double, but the ids are int64"),
        (pa.table({"star_id": pa.array([2**64 - 1], pa.uint64())}), "does not fit"),
    ],
)
def test_only_that_cannot_be_used(tmp_path, targets, message):
    write(tmp_path / "tables" / "a.parquet", stars(3))
    if targets is not None:
        write(tmp_path / "targets.parquet", targets)
    assert message in refusal(settings_for(tmp_path / "tables", input__only=str(tmp_path / "targets.parquet")))


@given(
    group=st.integers(1, 12),
    batch_rows=st.integers(1, 12),
    low=st.integers(-1, 14),
    high=st.integers(-1, 14),
)
def test_rows_do_not_depend_on_row_groups_and_batches(tmp_path_factory, group, batch_rows, low, high):
    folder = tmp_path_factory.mktemp("tables")
    write(folder / "a.parquet", stars(11), row_group_size=group)
    settings = settings_for(folder, input__where=[["star_id", ">", low], ["star_id", "<=", high]])
    table = read_all(settings, batch_rows=batch_rows)
    assert table["star_id"].to_pylist() == [k for k in range(1, 12) if low < k <= high]
    assert table["_input_row"].to_pylist() == [k - 1 for k in range(1, 12) if low < k <= high]


# ---- trouble while reading


def test_file_that_vanished_is_trouble_and_not_bad_input(tmp_path):
    path = write(tmp_path / "a.parquet", stars(3))
    settings = settings_for(tmp_path)
    source = open_source(settings)
    path.unlink()
    with pytest.raises(EnvironmentTrouble, match=r"a\.parquet"):
        list(read_rows(source, settings, all_pieces(source), ["star_id"], 10))


def test_damaged_page_names_the_file(tmp_path):
    path = write(tmp_path / "a.parquet", stars(3000), write_page_checksum=True, compression="none")
    settings = settings_for(tmp_path)
    source = open_source(settings)
    with path.open("r+b") as file:
        file.seek(2000)
        file.write(b"\xff" * 64)
    with pytest.raises(InputError, match=r"a\.parquet is damaged"):
        list(read_rows(source, settings, all_pieces(source), settings.used_columns(), 5000))

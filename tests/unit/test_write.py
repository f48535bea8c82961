"""Writing: whole files or none, the VOTable header, and packing that does not show the parts."""

import hashlib
import itertools
import os
import stat
import warnings

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from astropy import units as u
from astropy.table import Table
from hypothesis import given, settings
from hypothesis import strategies as st

from small_survey import settings_for
from starkiln.errors import EnvironmentTrouble
from starkiln.tables import write
from starkiln.tables.columns import catalogue_schema, draws_schema, rejected_schema
from starkiln.tables.votable import string_widths, with_header
from starkiln.tables.write import Packer, group_rows, pack, publish, read_groups, write_part

ID = pa.field("star_id", pa.int64(), metadata={"ucd": "meta.id;meta.main"})


def invented(schema, rows, seed=1):
    """A table of a schema with invented values and some nulls in the float columns."""
    random = np.random.default_rng(seed)
    arrays = []
    for field in schema:
        if pa.types.is_floating(field.type):
            array = pa.array(random.normal(5, 1, rows).astype(field.type.to_pandas_dtype()))
            array = pa.array(array.to_numpy(), field.type, mask=random.random(rows) < 0.2)
        elif pa.types.is_integer(field.type):
            array = pa.array(random.integers(0, 100, rows), field.type)
        elif pa.types.is_fixed_size_list(field.type):
            flat = pa.array(random.normal(5, 1, rows * field.type.list_size).astype(np.float32))
            array = pa.FixedSizeListArray.from_arrays(flat, type=field.type)
        else:
            array = pa.array([f"{field.name} {k % 7}" for k in range(rows)], pa.string())
        arrays.append(array)
    return pa.table(arrays, schema=schema)


def catalogue(rows, carry=(), seed=1):
    return invented(catalogue_schema(settings_for("/survey"), ID, carry), rows, seed)


def published(table, path):
    publish(write_part(table, path), path)
    return path


def votable_read(path):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        return Table.read(path, format="parquet.votable")


# ---- one file


def test_nothing_has_the_name_before_it_is_published(tmp_path):
    path = tmp_path / "part-000003.parquet"
    table = catalogue(20)
    written = write_part(table, path)
    assert not path.exists()
    assert written.tmp_path.parent == tmp_path
    assert written.tmp_path.name.startswith(".part-000003.parquet.")
    assert written.tmp_path.suffix == ".tmp"
    assert written.rows == 20
    assert written.sha256 == hashlib.sha256(written.tmp_path.read_bytes()).hexdigest()
    publish(written, path)
    assert os.listdir(tmp_path) == [path.name]
    assert pq.read_table(path).equals(table)


def test_two_writers_of_one_part_do_not_meet(tmp_path):
    path = tmp_path / "part.parquet"
    first, second = write_part(catalogue(3), path), write_part(catalogue(3), path)
    assert first.tmp_path != second.tmp_path
    assert first.sha256 == second.sha256


@pytest.mark.parametrize("umask", [0o022, 0o027, 0o002])
def test_files_get_the_modes_that_the_umask_leaves(tmp_path, umask):
    before = os.umask(umask)
    try:
        path = published(catalogue(3), tmp_path / "a.parquet")
    finally:
        os.umask(before)
    assert stat.S_IMODE(path.stat().st_mode) == 0o666 & ~umask


def test_failure_leaves_no_file(tmp_path, monkeypatch):
    def full(*args, **kwargs):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(write.os, "fsync", full)
    with pytest.raises(EnvironmentTrouble, match=r"a\.parquet: No space left on device"):
        write_part(catalogue(3), tmp_path / "a.parquet")
    assert os.listdir(tmp_path) == []


def test_file_with_other_rows_than_written_is_noticed(tmp_path, monkeypatch):
    class Short(pq.ParquetWriter):
        def write_table(self, table, **options):
            super().write_table(table.slice(1), **options)

    monkeypatch.setattr(write.pq, "ParquetWriter", Short)
    with pytest.raises(EnvironmentTrouble, match="3 rows were written but 2 are in the file"):
        write_part(catalogue(3), tmp_path / "a.parquet")
    assert os.listdir(tmp_path) == []


def test_folder_that_is_not_there(tmp_path):
    with pytest.raises(EnvironmentTrouble, match="No such file"):
        write_part(catalogue(3), tmp_path / "nowhere" / "a.parquet")


def test_publishing_what_is_gone(tmp_path):
    written = write_part(catalogue(3), tmp_path / "a.parquet")
    written.tmp_path.unlink()
    with pytest.raises(EnvironmentTrouble, match=r"a\.parquet"):
        publish(written, tmp_path / "a.parquet")


def test_flipped_bit_never_changes_a_value_unnoticed(tmp_path):
    table = catalogue(200).select(["star_id", "teff_p50", "photosphere"])
    path = published(table, tmp_path / "a.parquet")
    whole = path.read_bytes()
    metadata = pq.read_metadata(path)
    length = sum(metadata.row_group(0).column(k).total_compressed_size for k in range(3))
    noticed = 0
    for place in range(4, 4 + length, 3):
        path.write_bytes(whole[:place] + bytes([whole[place] ^ 4]) + whole[place + 1 :])
        try:
            (found,) = read_groups(path)
        except EnvironmentTrouble:
            noticed += 1
        else:
            assert found.equals(table)
    assert noticed > 100


# ---- the VOTable header


CARRIED = [
    pa.field("ra", pa.float64(), metadata={"unit": "deg", "ucd": "pos.eq.ra"}),
    pa.field("name", pa.string(), metadata={"description": "Name in <2MASS> & others"}),
    pa.field("2mass_name", pa.string()),
    pa.field("weird", pa.float32(), metadata={"unit": "furlongs per fortnight", "ucd": "so;; odd"}),
]


@pytest.mark.parametrize("rows", [0, 1, 30])
def test_astropy_reads_the_catalogue_with_units_and_descriptions(tmp_path, rows):
    table = catalogue(rows, CARRIED)
    found = votable_read(published(table, tmp_path / "a.parquet"))
    assert set(found.colnames) == set(table.column_names)
    assert len(found) == rows
    assert found["teff_p50"].unit == u.K
    assert found["fbol_p50"].unit == u.W / u.m**2
    assert found["ra"].unit == u.deg
    assert found["weird"].unit is None
    assert found["teff_p50"].description == "Effective temperature, posterior median"
    assert found["2mass_name"].tolist() == table["2mass_name"].to_pylist()
    assert found["name"].description == "Name in <2MASS> & others"
    assert found["teff_p50"].meta["ucd"] == "phys.temperature.effective;stat.median"
    assert found["star_id"].dtype == np.int64
    assert found["star_id"].tolist() == table["star_id"].to_pylist()
    assert found["photosphere"].tolist() == table["photosphere"].to_pylist()
    expected = table["lum_p50"].fill_null(np.nan).to_numpy()
    np.testing.assert_array_equal(np.asarray(found["lum_p50"], np.float32), expected)


def test_strings_are_not_cut_and_null_strings_read_as_none(tmp_path):
    # astropy's reader knows no null string: it writes the word None.
    texts = ["Tamarin α Ursae Minoris B", None, ""]
    table = pa.table({"a": [1, 2, 3], "name": pa.array(texts), "short": pa.array(["x", None, "y"])})
    found = votable_read(published(table, tmp_path / "a.parquet"))
    assert found["name"].tolist() == ["Tamarin α Ursae Minoris B", "None", ""]
    assert found["short"].tolist() == ["x", "None", "y"]


def test_types_that_votable_lacks_come_through_exactly(tmp_path):
    stamps = pa.array([0, None], pa.timestamp("us"))
    big = pa.array([2**64 - 1, 2**53 + 1], pa.uint64())
    table = pa.table({"a": [1, 2], "big": big, "when": stamps, "ok": pa.array([True, None])})
    found = votable_read(published(table, tmp_path / "a.parquet"))
    assert found["big"].tolist() == [2**64 - 1, 2**53 + 1]
    assert found["ok"].tolist() == [True, None]
    assert np.isnat(found["when"]).tolist() == [False, True]


def test_astropy_reads_rejected_rows_and_draws(tmp_path):
    rejected = invented(rejected_schema(ID), 4)
    assert votable_read(published(rejected, tmp_path / "a.parquet"))["reason"][3] == "reason 3"
    draws = invented(draws_schema(settings_for("/survey", sampling__keep_draws=6), ID), 4)
    found = votable_read(published(draws, tmp_path / "b.parquet"))
    assert found["teff"].shape == (4, 6)
    np.testing.assert_array_equal(found["teff"][2], draws["teff"][2].as_py())


def test_header_says_nothing_of_time_or_place(tmp_path):
    schema = with_header(catalogue(0).schema, {})
    assert set(schema.metadata) == {
        b"starkiln.schema",
        b"IVOA.VOTable-Parquet.version",
        b"IVOA.VOTable-Parquet.content",
        b"table::len::photosphere",
    }
    content = schema.metadata[b"IVOA.VOTable-Parquet.content"].decode()
    assert content.startswith("<?xml")
    for word in (os.uname().nodename, str(tmp_path), "202"):
        assert word not in content


def test_widths_count_characters():
    table = pa.table({"name": ["αβγδεζ", None], "none": pa.array([None, None], pa.string()), "x": [1, 2]})
    assert string_widths(table) == {"name": 6, "none": 4}


# ---- packing


def packed_bytes(folder, tables, schema, rows_per_file):
    folder.mkdir()
    parts = []
    for number, table in enumerate(tables):
        parts.append(published(table, folder / f"cut-{number}.parquet"))
    target = folder / "packed"
    target.mkdir()
    files = pack(parts, target, schema, rows_per_file)
    assert [file.path.name for file in files] == sorted(os.listdir(target))
    assert all(hashlib.sha256(file.path.read_bytes()).hexdigest() == file.sha256 for file in files)
    return [(file.rows, file.path.read_bytes()) for file in files]


@settings(deadline=None, max_examples=25)
@given(
    cuts=st.lists(st.integers(0, 60), max_size=6).map(sorted),
    rows_per_file=st.integers(7, 70),
    group=st.integers(1, 25),
)
def test_packed_bytes_do_not_show_the_parts(tmp_path_factory, cuts, rows_per_file, group):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(write, "ROW_GROUP_ROWS", group)
        folder = tmp_path_factory.mktemp("pack")
        table = catalogue(60, CARRIED).select(["star_id", "ra", "name", "teff_p50", "photosphere"])
        edges = [0, *cuts, 60]
        pieces = [table.slice(a, b - a) for a, b in itertools.pairwise(edges)]
        cut = packed_bytes(folder / "cut", pieces, table.schema, rows_per_file)
        whole = packed_bytes(folder / "whole", [table], table.schema, rows_per_file)
        assert cut == whole
        assert [rows for rows, _ in cut[:-1]] == [rows_per_file] * (len(cut) - 1)
        assert sum(rows for rows, _ in cut) == 60
        read = pa.concat_tables([pq.read_table(file) for file in sorted((folder / "cut/packed").iterdir())])
        assert read.equals(table)


def test_row_groups_of_packed_files(tmp_path, monkeypatch):
    monkeypatch.setattr(write, "ROW_GROUP_ROWS", 10)
    table = catalogue(33)
    files = pack([published(table, tmp_path / "x.parquet")], tmp_path, table.schema, 24)
    groups = [
        [metadata.row_group(k).num_rows for k in range(metadata.num_row_groups)]
        for metadata in (pq.read_metadata(file.path) for file in files)
    ]
    assert groups == [[10, 10, 4], [9]]


def test_long_strings_do_not_show_the_parts(tmp_path):
    """Strings that fill many pages and overflow the dictionary, cut at places that divide no page."""
    table = pa.table({"name": [f"{k:060d}" for k in range(40_000)]})
    cut = packed_bytes(tmp_path / "cut", [table.slice(0, 17_777), table.slice(17_777)], table.schema, 40_000)
    whole = packed_bytes(tmp_path / "whole", [table], table.schema, 40_000)
    assert cut == whole


def test_wide_rows_make_short_row_groups():
    draws = draws_schema(settings_for("/survey", sampling__keep_draws=1000), ID)
    assert group_rows(draws) == 32_000_000 // (8 + 6 * 4000)
    assert group_rows(catalogue(0).schema) == 50_000


@pytest.mark.parametrize("parts", [[], [catalogue(0)], [catalogue(0), catalogue(0)]])
def test_no_rows_still_make_one_file_with_the_schema(tmp_path, parts):
    paths = [published(table, tmp_path / f"x{k}.parquet") for k, table in enumerate(parts)]
    (file,) = pack(paths, tmp_path, catalogue(0).schema, 10)
    assert file.rows == 0
    assert pq.read_schema(file.path).equals(with_header(catalogue(0).schema, {}), check_metadata=True)
    assert len(votable_read(file.path)) == 0


def test_full_last_file_is_not_followed_by_an_empty_one(tmp_path):
    files = pack([published(catalogue(20), tmp_path / "x.parquet")], tmp_path, catalogue(0).schema, 10)
    assert [file.rows for file in files] == [10, 10]


def test_width_of_strings_is_that_of_the_longest_part(tmp_path):
    tables = [pa.table({"name": [text]}) for text in ("short", "very much longer", "x")]
    paths = [published(table, tmp_path / f"x{k}.parquet") for k, table in enumerate(tables)]
    (file,) = pack(paths, tmp_path, tables[0].schema, 10)
    assert votable_read(file.path)["name"].tolist() == ["short", "very much longer", "x"]


def test_failing_packer_leaves_no_temporary_file(tmp_path):
    table = catalogue(25)

    def break_off():
        with Packer(tmp_path, table.schema, 10) as packer:
            packer.add(table)
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        break_off()
    assert sorted(os.listdir(tmp_path)) == ["part-000000.parquet", "part-000001.parquet"]


def test_part_that_is_missing_or_damaged(tmp_path):
    schema = catalogue(0).schema
    with pytest.raises(EnvironmentTrouble, match=r"gone\.parquet"):
        pack([tmp_path / "gone.parquet"], tmp_path, schema, 10)
    (tmp_path / "cut.parquet").write_bytes(b"PAR1PAR1")
    with pytest.raises(EnvironmentTrouble, match=r"cut\.parquet"):
        pack([tmp_path / "cut.parquet"], tmp_path, schema, 10)

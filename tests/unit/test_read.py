"""Reading a run's tables back: exact values, masks, units, and where a table is looked for."""

import numpy as np
import pyarrow as pa
import pytest
from astropy import units as u

from small_survey import settings_for
from starkiln.errors import InputError
from starkiln.tables.columns import catalogue_schema
from starkiln.tables.read import descriptions, read, units
from starkiln.tables.write import publish, write_part

TABLE = pa.table(
    {
        "star_id": pa.array([2**63 - 1, None, 2**53 + 1], pa.int64()),
        "big": pa.array([2**64 - 1, 0, 5], pa.uint64()),
        "name": pa.array(["α", None, "beta"]),
        "x": pa.array([1.5, None, np.nan], pa.float32()),
        "ok": pa.array([True, None, False]),
        "when": pa.array([0, None, 10**6], pa.timestamp("us")),
        "draws": pa.array([[1, 2], [3, 4], [5, 6]], pa.list_(pa.float32(), 2)),
    }
).cast(
    pa.schema(
        [
            pa.field("star_id", pa.int64()),
            pa.field("big", pa.uint64()),
            pa.field("name", pa.string()),
            pa.field(
                "x", pa.float32(), metadata={"unit": "solRad", "ucd": "phys.size", "description": "Size"}
            ),
            pa.field("ok", pa.bool_()),
            pa.field("when", pa.timestamp("us")),
            pa.field("draws", pa.list_(pa.float32(), 2), metadata={"unit": "K"}),
        ]
    )
)


def published(table, path):
    path.parent.mkdir(parents=True, exist_ok=True)
    publish(write_part(table, path), path)


@pytest.fixture
def run_dir(tmp_path):
    generation = tmp_path / "generations" / "000001"
    published(TABLE, generation / "catalogue" / "part-000000.parquet")
    published(TABLE.slice(0, 1), generation / "catalogue" / "part-000001.parquet")
    published(TABLE.select(["star_id"]), generation / "rejected" / "part-000000.parquet")
    (tmp_path / "current").symlink_to("generations/000001")
    return tmp_path


def test_values_are_exact_and_nulls_are_masked(run_dir):
    table = read(run_dir)
    assert len(table) == 4
    assert table["star_id"].dtype == np.int64
    assert table["star_id"].tolist() == [2**63 - 1, None, 2**53 + 1, 2**63 - 1]
    assert table["big"].tolist() == [2**64 - 1, 0, 5, 2**64 - 1]
    assert table["name"].tolist() == ["α", None, "beta", "α"]
    assert table["ok"].tolist() == [True, None, False, True]
    assert table["x"].dtype == np.float32
    assert table["x"].mask.tolist() == [False, True, False, False]
    assert np.isnan(table["x"].data.data[[1, 2]]).all()
    assert table["when"].dtype == np.dtype("datetime64[us]")
    assert table["when"].mask.tolist() == [False, True, False, False]
    assert table["draws"].tolist() == [[1, 2], [3, 4], [5, 6], [1, 2]]


def test_units_and_descriptions(run_dir):
    table = read(run_dir)
    assert (table["x"].unit, table["x"].description) == (u.R_sun, "Size")
    assert table["x"].meta["ucd"] == "phys.size"
    assert table["star_id"].unit is None
    for path in (
        run_dir,
        run_dir / "current",
        run_dir / "current" / "catalogue",
        run_dir / "generations/000001",
    ):
        assert units(path) == {"x": u.R_sun, "draws": u.K}
        assert descriptions(path) == {"x": "Size"}
    assert units(run_dir / "current" / "catalogue" / "part-000000.parquet")["x"] == u.R_sun


def test_units_of_the_catalogue(tmp_path):
    schema = catalogue_schema(settings_for("/survey"), pa.field("star_id", pa.int64()), [])
    published(schema.empty_table(), tmp_path / "part.parquet")
    found = units(tmp_path)
    assert found["teff_p50"] == u.K
    assert found["fbol_hi95"] == u.W / u.m**2
    assert "flags" not in found
    assert len(read(tmp_path)) == 0


def test_other_tables_and_chosen_columns(run_dir):
    assert read(run_dir, "rejected").colnames == ["star_id"]
    assert read(run_dir, columns=["x", "name"]).colnames == ["x", "name"]
    with pytest.raises(InputError, match=r"no column 'nane' \(did you mean 'name'\?\)"):
        read(run_dir, columns=["nane"])


def test_run_that_has_published_nothing(tmp_path):
    (tmp_path / "generations").mkdir()
    with pytest.raises(InputError, match=r"no catalogue has been published yet: `starkiln run`"):
        read(tmp_path)


def test_no_such_table(tmp_path):
    with pytest.raises(InputError, match="nowhere"):
        read(tmp_path / "nowhere")


def test_damaged_file_is_named(tmp_path):
    path = tmp_path / "a.parquet"
    published(TABLE, path)
    path.write_bytes(path.read_bytes()[:-10])
    with pytest.raises(InputError, match=r"a\.parquet is no whole Parquet file"):
        units(path)
    published(TABLE, path)
    data = bytearray(path.read_bytes())
    data[40] ^= 0xFF
    path.write_bytes(data)
    with pytest.raises(InputError, match=r"a\.parquet is damaged"):
        read(path)

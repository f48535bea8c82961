import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from astropy import units as u
from astropy.table import MaskedColumn, QTable, Table
from astropy.utils.masked import Masked

import starkiln
from fake_stages import pass_through, reject_odd_ids, stages
from small_survey import BANDS, band, settings_for, stars, with_column
from starkiln.errors import InputError, SettingsError

SECTIONS = {
    "input": {
        "id": "star_id",
        "carry": ["ra"],
        "parallax": {"value": "parallax", "error": "parallax_error", "unit": "mas"},
        "photometry": [band(label) for label in BANDS],
    }
}
BIG_ID = 2**62 + 1


def fit(table, settings=SECTIONS, process=pass_through):
    return starkiln.fit_table(table, settings, stages=stages(process))


@pytest.fixture
def table():
    """Ten stars with big ids; the first id comes again as the last."""
    ids = [BIG_ID + row for row in range(9)] + [BIG_ID]
    return with_column(stars(10), "star_id", ids)


def astropy_table(table):
    columns = {name: table[name].to_numpy() for name in table.column_names}
    return Table(columns, units={"parallax": u.mas, "panstarrs_g": u.nJy})


@pytest.mark.parametrize("convert", [lambda table: table, pa.Table.to_pandas, astropy_table])
def test_every_kind_of_table_gives_the_same_catalogue(table, convert):
    frame = fit(convert(table))
    assert frame["star_id"].tolist() == [BIG_ID + row for row in range(9)]
    assert frame["ra"].tolist() == table["ra"].to_pylist()[:9]
    assert frame["flags"].tolist() == [1 << 17] + [0] * 8
    assert frame["row_hash"].tolist() == fit(table)["row_hash"].tolist()
    rejected = pd.DataFrame(frame.attrs["rejected"])
    assert rejected[["star_id", "input_file", "input_row", "reason"]].values.tolist() == [
        [BIG_ID, "table", 9, "duplicate id"]
    ]


def test_masked_quantities_are_nulls(table):
    column = MaskedColumn(table["panstarrs_g"].to_numpy(), mask=[True, *[False] * 9], unit=u.nJy)
    masked = QTable(astropy_table(table))
    masked["panstarrs_g"] = Masked(column.data.data * u.nJy, column.mask)
    nulled = with_column(table, "panstarrs_g", pa.array(column.data.data, mask=np.asarray(column.mask)))
    assert fit(masked)["row_hash"].tolist() == fit(nulled)["row_hash"].tolist() != fit(table)["row_hash"].tolist()


def test_an_integer_id_beside_a_null_stays_exact(table):
    with_null = with_column(table, "star_id", pa.array([None, BIG_ID, *[3] * 8], pa.int64()))
    frame = fit(with_null)
    assert frame["star_id"].tolist() == [BIG_ID, 3]
    assert [row["star_id"] for row in frame.attrs["rejected"]][1:] == [3] * 7
    assert frame.attrs["rejected"][0]["reason"] == "no id"


def test_masked_bytes_and_big_endian_columns_are_read(table):
    data = astropy_table(table)
    data["star_id"] = np.array([f"T{row}" for row in range(10)], "S3")
    data["ra"] = data["ra"].astype(">f8")
    data["panstarrs_g"] = MaskedColumn(data["panstarrs_g"], mask=np.arange(10) == 1)
    frame = fit(data)
    assert frame["star_id"].tolist() == [f"T{row}" for row in range(10)]
    assert frame["ra"].tolist() == table["ra"].to_pylist()


def test_parts_do_not_change_the_rows(table):
    small = fit(table, SECTIONS | {"compute": {"rows_per_part": 3}}, reject_odd_ids)
    pd.testing.assert_frame_equal(small, fit(table, process=reject_odd_ids))
    assert len(small) + len(small.attrs["rejected"]) == 10


def test_settings_may_be_a_model_a_path_or_dictionaries(table, tmp_path):
    from starkiln.settings import dump_toml

    settings = settings_for(tmp_path / "nothing", input__carry=["ra"])
    path = tmp_path / "run.toml"
    path.write_text(dump_toml(settings))
    expected = fit(table)
    pd.testing.assert_frame_equal(fit(table, settings), expected)
    pd.testing.assert_frame_equal(fit(table, path), expected)
    pd.testing.assert_frame_equal(fit(table, str(path)), expected)


def test_filters_hold_in_memory_too(table):
    sections = {"input": SECTIONS["input"] | {"where": [["star_id", ">", BIG_ID + 4]]}}
    assert fit(table, sections)["star_id"].tolist() == [BIG_ID + row for row in range(5, 9)]


def test_no_row_at_all_gives_an_empty_catalogue(table):
    frame = fit(table.slice(0, 0))
    assert len(frame) == len(frame.attrs["rejected"]) == 0
    assert "teff_p50" in frame.columns


def test_missing_columns_are_all_named_with_the_nearest(table):
    changed = table.rename_columns({"panstarrs_g": "panstars_g"}).drop_columns("parallax")
    with pytest.raises(InputError, match=r"no column 'parallax'.*, 'panstarrs_g' \(did you mean 'panstars_g'\?\)"):
        fit(changed)


def test_a_unit_that_differs_from_the_settings_is_an_error(table):
    data = astropy_table(table)
    data["panstarrs_g"].unit = u.mJy
    with pytest.raises(InputError, match=r"'panstarrs_g' is in 'mJy'.*has 'nJy'"):
        fit(data)


def test_wrong_settings_are_an_error(table):
    with pytest.raises(SettingsError, match="sead"):
        fit(table, SECTIONS | {"run": {"sead": 3}})


def test_two_catalogues_can_be_joined_and_written(table, tmp_path):
    frame = fit(table)
    assert len(pd.concat([frame, fit(table)])) == 2 * len(frame)
    frame.to_parquet(tmp_path / "catalogue.parquet")
    assert len(pd.read_parquet(tmp_path / "catalogue.parquet")) == len(frame)

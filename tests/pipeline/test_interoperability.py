"""A catalogue in other people's hands: astropy, pandas, pyarrow and dask; FITS, VOTable and CSV in and out."""

from datetime import datetime

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import pytest
from astropy import units as u
from astropy.io.votable.ucd import check_ucd
from astropy.table import MaskedColumn, QTable, Table
from astropy.time import Time

import starkiln
from fake_stages import stages
from pipeline_survey import QUICK, blackbodies, write
from readme_parts import block_with
from small_survey import settings_for, stars, with_column
from starkiln.engine.run import run_settings
from starkiln.errors import InputError
from starkiln.tables.columns import fitted_columns
from starkiln.tables.source import open_source

NIGHTS = pa.array([None, *(datetime(2026, 5, day) for day in range(1, 24))], pa.timestamp("us"))


def odd_survey():
    """Twenty-four stars, some without a parallax, and columns of every kind with nulls to carry along."""
    table = blackbodies(24)
    parallax = [None if row % 6 == 0 else value for row, value in enumerate(table["parallax"].to_pylist())]
    table = with_column(table, "parallax", parallax)
    table = with_column(table, "ra", table["ra"], {"unit": "deg", "ucd": "pos.eq.ra", "description": "Right ascension"})
    table = with_column(table, "visits", pa.array([None, *range(23)], pa.int32()))
    table = with_column(table, "name", ["a Tam", None, "", *["plain"] * 21])
    table = with_column(table, "seen", [None, *[True, False, True] * 7, False, True])
    return with_column(table, "night", NIGHTS)


@pytest.fixture(scope="module")
def run_dir(tmp_path_factory):
    """A published run of odd stars, fitted for real; its settings lie beside it."""
    folder = tmp_path_factory.mktemp("interoperability")
    tables = write(folder / "survey", a=odd_survey())
    settings = settings_for(
        tables, folder / "run", input__carry=["ra", "visits", "name", "seen", "night"], sampling__keep_draws=4, **QUICK
    )
    assert run_settings(settings).exit_code == 0
    return folder / "run"


@pytest.fixture
def catalogue(run_dir):
    return starkiln.read(run_dir)


def files(run_dir):
    return sorted((run_dir / "catalogue").iterdir())


def words(text):
    return text.split() if text else None


def texts(column):
    return [value or "" for value in column.astype(str).tolist()]


def same(found, expected, kinds=True):
    """Assert that two tables have the same columns, units, UCDs, descriptions, nulls and values."""
    assert found.colnames == expected.colnames
    for name in expected.colnames:
        ours, theirs = expected[name], found[name]
        if kinds:
            assert (theirs.unit, words(theirs.description)) == (ours.unit, words(ours.description)), name
            assert theirs.meta.get("ucd") == ours.meta.get("ucd"), name
            assert ours.dtype.kind == "U" or theirs.dtype.newbyteorder("=") == ours.dtype, name
        if ours.dtype.kind == "U":  # none of the formats tells an empty string from none
            assert texts(theirs) == texts(ours)
            continue
        nulls = np.ma.getmaskarray(np.ma.asarray(ours))
        np.testing.assert_array_equal(np.ma.getmaskarray(np.ma.asarray(theirs)), nulls, err_msg=name)
        values = np.ma.asarray(ours)[~nulls].data, np.ma.asarray(theirs)[~nulls].data
        np.testing.assert_array_equal(values[1].astype(values[0].dtype), values[0], err_msg=name)


# ---- reading


def test_every_column_has_a_ucd_and_every_unit_is_known(run_dir):
    settings = settings_for("/survey")
    schema = pq.read_schema(files(run_dir)[0])
    for column in fitted_columns(settings):
        assert check_ucd(schema.field(column.name).metadata[b"ucd"].decode(), check_controlled_vocabulary=True)
    units = starkiln.units(run_dir)
    assert set(units) == {"ra", *(column.name for column in fitted_columns(settings) if column.unit)}


def test_astropy_opens_a_file_with_units(run_dir, catalogue):
    found = Table.read(files(run_dir)[0], format="parquet.votable")
    assert set(found.colnames) == set(catalogue.colnames)
    assert (found["teff_p50"].unit, found["fbol_p50"].unit, found["ra"].unit) == (u.K, u.W / u.m**2, u.deg)
    assert found["lum_p50"].meta["ucd"] == "phys.luminosity;stat.median"
    np.testing.assert_array_equal(found["teff_p50"], catalogue["teff_p50"])
    assert np.isnan(found["lum_p50"]).tolist() == catalogue["lum_p50"].mask.tolist()


def test_a_quantity_comes_out_of_a_column(catalogue):
    table = QTable(catalogue)
    sigma_t4 = (table["fbol_p50"] * 4 * np.pi * table["dist_p50"] ** 2).to(u.L_sun) / table["lum_p50"]
    assert sigma_t4.unit == u.dimensionless_unscaled
    np.testing.assert_allclose(sigma_t4[~sigma_t4.mask].value, 1, atol=0.1)


@pytest.mark.filterwarnings("ignore:The inplace keyword in DataFrame:DeprecationWarning")  # dask's own use of pandas
def test_pandas_pyarrow_and_dask_open_the_folder(run_dir, catalogue):
    import dask.dataframe

    folder = run_dir / "catalogue"
    assert pd.read_parquet(folder)["teff_p50"].tolist() == catalogue["teff_p50"].tolist()
    table = ds.dataset(folder).to_table(filter=ds.field("flags") == 0)
    assert table["star_id"].to_pylist() == catalogue["star_id"][catalogue["flags"] == 0].tolist()
    assert table.schema.field("radius_p50").metadata[b"unit"] == b"solRad"
    frame = dask.dataframe.read_parquet(folder)
    assert frame["star_id"].compute(scheduler="synchronous").tolist() == catalogue["star_id"].tolist()


def test_all_tables_of_a_run_open(run_dir):
    draws = starkiln.read(run_dir, "draws")
    assert draws["teff"].shape == draws["lum"].shape == (24, 4)
    assert not np.isnan(draws["teff"]).any()
    assert draws["lum"].mask.all(axis=1).tolist() == [row % 6 == 0 for row in range(24)]
    assert len(starkiln.read(run_dir, "rejected")) == 0


@pytest.mark.parametrize("carry", [[], ["field"]])
def test_hive_keeps_the_folders_of_the_input(tmp_path, carry):
    for field, first in (("T1", 1), ("T2", 11)):
        write(tmp_path / "survey" / f"field={field}", stars=stars(10, first))
    settings = settings_for(tmp_path / "survey", tmp_path / "run", output__layout="hive", input__carry=carry)
    assert run_settings(settings, stages=stages()).exit_code == 0
    folder = tmp_path / "run" / "catalogue"
    assert sorted(path.relative_to(folder).parts[0] for path in folder.glob("*/*.parquet")) == ["field=T1", "field=T2"]
    one = ds.dataset(folder, partitioning=ds.partitioning(flavor="hive")).to_table(filter=ds.field("field") == "T2")
    assert one["star_id"].to_pylist() == list(range(11, 21))
    assert starkiln.read(tmp_path / "run")["star_id"].tolist() == list(range(1, 21))
    frame = pd.read_parquet(folder, partitioning=None if carry else "hive")
    assert frame["field"].tolist() == ["T1"] * 10 + ["T2"] * 10


# ---- out and back


def test_fits_and_back(catalogue, tmp_path):
    # FITS has no null truth value and no type for times.
    del catalogue["seen"], catalogue["night"]
    catalogue.write(tmp_path / "catalogue.fits")
    found = Table.read(tmp_path / "catalogue.fits")
    same(found, catalogue)


def test_votable_and_back(catalogue, tmp_path):
    del catalogue["night"]
    catalogue.write(tmp_path / "catalogue.vot", format="votable")
    same(Table.read(tmp_path / "catalogue.vot", format="votable"), catalogue)


def test_ecsv_and_back(catalogue, tmp_path):
    catalogue["night"] = np.where(catalogue["night"].mask, "", np.datetime_as_string(catalogue["night"].data.data))
    catalogue.write(tmp_path / "catalogue.ecsv")
    same(Table.read(tmp_path / "catalogue.ecsv"), catalogue)


def test_csv_and_back(catalogue, tmp_path):
    del catalogue["seen"], catalogue["night"], catalogue["name"]
    catalogue.write(tmp_path / "catalogue.csv")
    same(Table.read(tmp_path / "catalogue.csv"), catalogue, kinds=False)


# ---- in


def mixed_table():
    """Stars as somebody's table might have them: names of its own, units, UCDs and nulls of every kind."""
    return Table(
        {
            "OBJ": MaskedColumn(["a", "b", "c"], mask=[False] * 3, description="Object"),
            "Gmag": MaskedColumn([15.0, 16.0, 0.0], mask=[False, False, True], unit="mag", meta={"ucd": "phot.mag"}),
            "Fx": MaskedColumn([1.0, 2.0, 3.0], mask=[True, False, False], unit="uJy", dtype=np.float32),
            "N": MaskedColumn([1, 2**60 + 1, 3], mask=[True, False, False]),
            "Bad": MaskedColumn([True, False, True], mask=[False] * 3),
        }
    )


NULLS = {"OBJ": [], "Gmag": [2], "Fx": [0], "N": [0], "Bad": []}


@pytest.mark.parametrize(
    ("name", "reader"),
    [("my.fits", {}), ("my.vot", {"format": "votable"}), ("my.ecsv", {}), ("my.csv", {})],
)
@pytest.mark.parametrize("kind", [Table, QTable])
def test_a_table_comes_in_with_units_and_nulls(tmp_path, name, reader, kind):
    mixed_table().write(tmp_path / name, **reader)
    starkiln.write_parquet(kind.read(tmp_path / name, **reader), tmp_path / "new" / "my.parquet")
    found = pq.read_table(tmp_path / "new" / "my.parquet")
    assert {column: [row for row in range(3) if found[column][row].as_py() is None] for column in NULLS} == NULLS
    assert found["N"].to_pylist() == [None, 2**60 + 1, 3]
    assert found["OBJ"].to_pylist() == ["a", "b", "c"]
    units = {} if name == "my.csv" else {"Gmag": u.mag, "Fx": u.uJy}
    assert starkiln.units(tmp_path / "new") == units


def test_descriptions_and_ucds_come_in(tmp_path):
    starkiln.write_parquet(mixed_table(), tmp_path / "my.parquet")
    found = starkiln.read(tmp_path / "my.parquet")
    assert (found["OBJ"].description, found["Gmag"].meta["ucd"]) == ("Object", "phot.mag")


def test_columns_that_no_run_can_take_are_all_named(tmp_path):
    table = mixed_table()
    table["spectrum"] = np.zeros((3, 2))
    table["when"] = Time(["2026-05-01"] * 3)
    with pytest.raises(
        InputError, match=r"'spectrum' \(\(2,\) values in a row\), 'when' \(a Time, not a plain column\)"
    ):
        starkiln.write_parquet(table, tmp_path / "my.parquet")
    assert list(tmp_path.iterdir()) == []


def test_what_is_no_table_is_refused(tmp_path):
    for other in ("my.csv", mixed_table().to_pandas()):
        with pytest.raises(
            TypeError, match=r"takes an astropy Table, not a .*: Table.read\(path\) makes one of a file"
        ):
            starkiln.write_parquet(other, tmp_path / "my.parquet")


def test_a_csv_as_input_is_told_the_way_in(tmp_path):
    mixed_table().write(tmp_path / "my.csv")
    with pytest.raises(InputError, match=r"my.csv: is no Parquet file: starkiln.write_parquet\(Table.read"):
        open_source(settings_for(tmp_path / "my.csv", tmp_path / "run"))


def test_masks_in_columns_of_their_own_are_refused(tmp_path):
    table = Table.from_pandas(stars(5).to_pandas())
    table["panstarrs_g"] = MaskedColumn(table["panstarrs_g"], mask=[True, *[False] * 4])
    table.write(tmp_path / "my.parquet")
    settings = settings_for(tmp_path / "my.parquet", tmp_path / "run")
    with pytest.raises(
        InputError, match=r"'panstarrs_g' has its nulls in 'panstarrs_g.mask'.*use starkiln.write_parquet"
    ):
        open_source(settings)
    starkiln.write_parquet(table, tmp_path / "my.parquet")
    assert open_source(settings).rows == 5


# ---- what the README tells to type


@pytest.fixture(scope="module")
def first_run(tmp_path_factory):
    """A folder where the README's first run has been done, on somebody's CSV."""
    folder = tmp_path_factory.mktemp("first_run")
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        somebodys_table().write("my.csv")
        exec(block_with("python", 'Table.read("my.csv"), "my_tables'), {})
        (folder / "my.toml").write_text(block_with("toml", '"my-survey"'))
        assert starkiln.run("my.toml").exit_code == 0
    return folder


def somebodys_table():
    """Eight stars under the names of the README, one without a magnitude, one with a placeholder."""
    table = blackbodies(8).to_pydict()
    mag = {"j_m": 1594.0, "k_m": 666.7}  # zero points of Cohen, Wheaton & Megeath 2003, AJ 126, 1090
    flux_njy = np.array(table["panstarrs_r"])
    made = Table({"source_id": [f"S{k}" for k in range(8)]})
    made["parallax"], made["parallax_error"] = table["parallax"], table["parallax_error"]
    made["flux_g"], made["flux_g_error"] = table["panstarrs_g"], table["panstarrs_g_error"]
    for name, zero_jy in mag.items():
        made[name] = MaskedColumn(-2.5 * np.log10(flux_njy * 0.7 / (zero_jy * 1e9)), mask=[True, *[False] * 7])
        made[name.replace("_m", "_msigcom")] = 0.02
    return made


def play(folder, monkeypatch, text, **names):
    """Run a block of the README in the folder of the first run; return the names it leaves."""
    monkeypatch.chdir(folder)
    scope = {"starkiln": starkiln, "Table": Table, **names}
    exec(text, scope)
    return scope


def test_a_first_run_by_the_readme(first_run, monkeypatch, capsys):
    left = play(first_run, monkeypatch, block_with("python", '"rejected"'))
    assert left["catalogue"]["source_id"].tolist() == [f"S{k}" for k in range(1, 8)]
    assert left["rejected"]["source_id"].tolist() == ["S0"]
    assert "teff_p50" in capsys.readouterr().out
    left = play(first_run, monkeypatch, block_with("python", "starkiln.fit_table"), table=somebodys_table())
    assert left["frame"]["source_id"].tolist() == [f"S{k}" for k in range(1, 8)]
    assert left["result"].exit_code == 0


@pytest.mark.parametrize(
    ("words", "name", "writer"),
    [
        ('Table.read("my.fits"), "my_tables', "my.fits", {}),
        ('Table.read("my.vot"', "my.vot", {"format": "votable"}),
        ("masked=True", "my.csv", {}),
        ("memmap=True", "my.fits", {}),
    ],
)
def test_recipes_in(tmp_path, monkeypatch, words, name, writer):
    table = somebodys_table()
    table["parallax"].unit = "mas"
    table["flux_g"][5] = -1
    table.write(tmp_path / name, **writer)
    play(tmp_path, monkeypatch, block_with("python", words))
    found = starkiln.read(tmp_path / "my_tables")
    assert found["source_id"].tolist() == table["source_id"].tolist()
    assert found["parallax"].unit == u.mas
    assert missing(found["j_m"]) == [0]
    assert missing(found["flux_g"]) == ([5] if name == "my.csv" else [])


def missing(column):
    """The rows without a value; astropy leaves the NaN of a FITS file that it reads bit by bit unmasked."""
    return np.flatnonzero(np.isnan(np.ma.filled(np.ma.asarray(column), np.nan))).tolist()


def test_recipes_out(first_run, tmp_path, monkeypatch):
    expected = starkiln.read(first_run / "runs" / "my-survey")
    play(first_run, monkeypatch, block_with("python", "catalogue.ecsv"))
    for name, reader in (("fits", {}), ("vot", {"format": "votable"}), ("ecsv", {}), ("csv", {})):
        same(Table.read(first_run / f"catalogue.{name}", **reader), expected, kinds=name != "csv")


@pytest.mark.filterwarnings("ignore:The inplace keyword in DataFrame:DeprecationWarning")  # dask's own use of pandas
def test_recipes_of_readers(first_run, monkeypatch):
    expected = starkiln.read(first_run / "runs" / "my-survey")
    left = play(first_run, monkeypatch, block_with("python", 'format="parquet.votable")  #'))
    assert left["table"]["teff_p50"].unit == u.K
    left = play(first_run, monkeypatch, block_with("python", "import pandas"))
    assert left["frame"]["teff_p50"].tolist() == expected["teff_p50"].tolist()
    assert left["units"]["lum_p50"] == u.L_sun
    assert left["sentences"]["teff_p50"] == "Effective temperature, posterior median"
    left = play(first_run, monkeypatch, block_with("python", "import pyarrow"))
    assert left["clean"]["source_id"].to_pylist() == expected["source_id"][expected["flags"] == 0].tolist()
    left = play(first_run, monkeypatch, block_with("python", "import dask.dataframe"))
    assert left["median"] == pytest.approx(np.median(expected["teff_p50"]), rel=0.2)

"""The registry of output columns: names, types, units, UCDs, and collisions."""

import pyarrow as pa
import pytest
from astropy import units as u
from astropy.io.votable.ucd import check_ucd

from small_survey import BANDS, settings_for
from starkiln.errors import SettingsError
from starkiln.tables.columns import (
    REJECTED,
    Column,
    catalogue_columns,
    catalogue_schema,
    draws_schema,
    fitted_columns,
    index_schema,
    output_fields,
    rejected_schema,
)

ID = pa.field("star_id", pa.int64())


def names(**changes):
    return [column.name for column in fitted_columns(settings_for("/survey", **changes))]


def test_names_and_order_are_frozen():
    quantities = ["teff", "radius", "lum", "dist", "av", "ang_diam", "fbol"]
    quantiles = ["lo95", "lo68", "p50", "hi68", "hi95"]
    assert names() == [
        *[f"{quantity}_{quantile}" for quantity in quantities for quantile in quantiles],
        *["lambda_peak_p50", "mbol_p50"],
        *["corr_teff_radius", "corr_teff_lum", "corr_teff_av", "corr_radius_lum"],
        *["photosphere", "ln_evidence_ratio", "photosphere_z1_p50", "photosphere_z1_lo68", "photosphere_z1_hi68"],
        *["chi2", "n_bands", "n_limits", "ppp_value"],
        *[f"residual_{band}" for band in BANDS],
        *[f"outlier_{band}" for band in BANDS],
        *["ess_bulk", "ess_tail", "autocorr_steps", "rhat_max", "n_steps", "accept_frac"],
        *["flags", "row_hash"],
    ]


@pytest.mark.parametrize(
    ("changes", "residuals", "outliers"),
    [
        ({"output__per_band": "residual"}, 3, 0),
        ({"output__per_band": "none"}, 0, 0),
        ({"model__outliers": False}, 3, 0),
        ({}, 3, 3),
    ],
)
def test_columns_per_band(changes, residuals, outliers):
    found = names(**changes)
    assert sum(name.startswith("residual_") for name in found) == residuals
    assert sum(name.startswith("outlier_") for name in found) == outliers


def all_columns():
    settings = settings_for("/survey", sampling__keep_draws=5)
    schemas = [
        catalogue_schema(settings, ID, []),
        rejected_schema(ID),
        draws_schema(settings, ID),
        index_schema(),
    ]
    return {field.name: Column.of(field) for schema in schemas for field in schema if field.name != ID.name}


@pytest.mark.parametrize("column", all_columns().values(), ids=lambda column: column.name)
def test_every_column_is_described(column):
    assert check_ucd(column.ucd, check_controlled_vocabulary=True, has_colon=True)
    assert column.description
    if column.unit:
        assert u.Unit(column.unit).to_string("vounit")


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("teff_p50", "K"),
        ("radius_lo68", "solRad"),
        ("lum_hi95", "solLum"),
        ("dist_p50", "pc"),
        ("av_p50", "mag"),
        ("ang_diam_p50", "mas"),
        ("fbol_p50", "W m-2"),
        ("lambda_peak_p50", "nm"),
        ("mbol_p50", "mag"),
        ("chi2", None),
    ],
)
def test_units(name, unit):
    assert all_columns()[name].unit == unit


def test_carried_columns_keep_type_and_metadata():
    fields = [
        pa.field("star_id", pa.uint64(), metadata={"ucd": "meta.id;meta.main"}),
        pa.field("ra", pa.float64(), metadata={"unit": "deg", "note": "ICRS"}),
        pa.field("seen", pa.timestamp("us", "UTC")),
    ]
    settings = settings_for("/survey", input__carry=["ra", "seen"])
    id_field, carried = output_fields(pa.schema(fields), settings)
    schema = catalogue_schema(settings, id_field, carried)
    assert [field.equals(schema.field(field.name), check_metadata=True) for field in fields] == [True] * 3
    assert schema.metadata == {b"starkiln.schema": b"1.0"}
    assert [column.name for column in catalogue_columns(settings, id_field, carried)] == schema.names
    assert catalogue_columns(settings, id_field, carried)[1].unit == "deg"


@pytest.mark.parametrize("name", ["teff_p50", "flags", "residual_panstarrs_g"])
def test_input_column_with_the_name_of_an_output_column(name):
    settings = settings_for("/survey", input__carry=[name])
    with pytest.raises(SettingsError, match=rf"'{name}'.*rename it"):
        catalogue_schema(settings, ID, [pa.field(name, pa.float64())])
    with pytest.raises(SettingsError, match=f"'{name}'"):
        catalogue_schema(settings, pa.field(name, pa.int64()), [])


def test_id_with_the_name_of_a_column_beside_it():
    for column in REJECTED:
        with pytest.raises(SettingsError, match=column.name):
            rejected_schema(pa.field(column.name, pa.int64()))
    with pytest.raises(SettingsError, match="'teff'"):
        draws_schema(settings_for("/survey", sampling__keep_draws=5), pa.field("teff", pa.int64()))


def test_rejected_rows_may_lack_an_id():
    assert rejected_schema(pa.field("star_id", pa.int64(), nullable=False)).field("star_id").nullable


def test_draws_are_lists_of_fixed_size():
    schema = draws_schema(settings_for("/survey", sampling__keep_draws=5), ID)
    assert schema.names == ["star_id", "teff", "radius", "lum", "dist", "av", "ang_diam"]
    assert {schema.field(name).type for name in schema.names[1:]} == {pa.list_(pa.float32(), 5)}

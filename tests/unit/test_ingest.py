"""Ingest: units, magnitudes, limits, missing values, and which rows are rejected for what."""

import dataclasses
from functools import lru_cache
from types import SimpleNamespace

import numpy as np
import pyarrow as pa
import pytest
from astropy import units as u
from astropy.constants import c
from hypothesis import given
from hypothesis import strategies as st

from small_survey import BANDS, band, read_in, settings_for, stars, with_column
from starkiln.inference.arithmetic import _exp_flat
from starkiln.physics.passbands import load_passband
from starkiln.stages.ingest import ingest, jy_per_unit, magnitudes_to_jy
from starkiln.tables.columns import rejected_schema


def run(table, **changes):
    settings = settings_for("/survey", **changes)
    return ingest(read_in(table), settings, model_of(settings))


passband = lru_cache(load_passband)


def model_of(settings):
    bands = settings.input.photometry
    return SimpleNamespace(passbands={band.label: passband(band.passband) for band in bands})


def one_band(**keys):
    """Settings of a single band."""
    return {"input__photometry": [band("panstarrs_g", **keys)], "input__min_bands": 1}


def fluxes(values, errors, **keys):
    table = with_column(stars(len(values)), "panstarrs_g", pa.array(values, pa.float64()))
    table = with_column(table, "panstarrs_g_error", pa.array(errors, pa.float64()))
    for name in ("bad", "limit"):
        if isinstance(keys.get(name), list):
            table = with_column(table, name, pa.array(keys[name], pa.bool_()))
            keys[name] = name
    return run(table, **one_band(**keys))


def reasons(ingested):
    return list(
        zip(
            ingested.rejected["input_row"].to_pylist(),
            ingested.rejected["reason"].to_pylist(),
            ingested.rejected["detail"].to_pylist(),
            strict=True,
        )
    )


# ---- fluxes


@pytest.mark.parametrize(
    ("unit", "jy"),
    [("Jy", 1.0), ("nJy", 1e-9), ("uJy", 1e-6), ("erg / (s cm2 Hz)", 1e23), ("W / (m2 Hz)", 1e26)],
)
def test_flux_units_per_frequency(unit, jy):
    found = fluxes([2.0, -3.0], [0.5, 0.25], unit=unit).stars
    np.testing.assert_allclose(found.flux_jy[:, 0], [2.0 * jy, -3.0 * jy], rtol=1e-14)
    np.testing.assert_allclose(found.error_jy[:, 0], [0.5 * jy, 0.25 * jy], rtol=1e-14)


@pytest.mark.parametrize("name", ["galex_nuv", "panstarrs_g", "johnson_v", "2mass_ks", "wise_w4"])
def test_flux_per_wavelength_is_the_band_average(name):
    """A spectrum flat in f_lambda: the band average of its f_nu, against the unit's factor."""
    passband = load_passband(name)
    f_lambda = 1.0 * u.W / u.m**2 / u.um
    average_jy = passband.average(lambda um: (f_lambda * (um * u.um) ** 2 / c).to_value(u.Jy))
    assert jy_per_unit("W / (m2 um)", passband.pivot_um) == pytest.approx(average_jy, rel=1e-9)


@pytest.mark.parametrize(
    ("keys", "zero_jy"),
    [
        ({"system": "AB"}, 3631.0),
        ({"system": "AB", "zero_point_jy": 3000.0}, 3000.0),
        ({"system": "Vega", "zero_point_jy": 3000.0}, 3000.0),
    ],
)
def test_magnitudes(keys, zero_jy):
    found = fluxes([0.0, 2.5, 5.0], [0.1, 0.1, 1e-3], unit="mag", **keys).stars
    np.testing.assert_allclose(found.flux_jy[:, 0], [zero_jy, zero_jy / 10, zero_jy / 100], rtol=1e-14)
    # 1.0857 mag is one sigma of a flux at S/N 1: 2.5 / ln 10 (Pogson's definition).
    np.testing.assert_allclose(found.error_jy[:, 0] / found.flux_jy[:, 0], np.array([0.1, 0.1, 1e-3]) / 1.0857362047581)


def test_vega_magnitudes_use_the_passband():
    table = with_column(with_column(stars(1), "j", [0.0]), "j_error", [0.01])
    photometry = [band("2mass_j", value="j", error="j_error", unit="mag", system="Vega")]
    found = run(table, input__photometry=photometry, input__min_bands=1).stars
    # Cohen, Wheaton & Megeath 2003, AJ 126, 1090: 1594 Jy.
    assert found.flux_jy[0, 0] == pytest.approx(1594.0, rel=1e-3)


@given(st.floats(1e-12, 1e6), st.floats(1e-4, 1.0))
def test_magnitudes_there_and_back(flux_jy, fraction):
    mag = (flux_jy * u.Jy).to_value(u.ABmag)
    flux, error = magnitudes_to_jy(
        np.array([mag]), np.array([2.5 / np.log(10) * fraction]), (0 * u.ABmag).to_value(u.Jy)
    )
    assert flux[0] == pytest.approx(flux_jy, rel=1e-12)
    assert error[0] == pytest.approx(fraction * flux_jy, rel=1e-12)


@given(st.lists(st.floats(-50, 50), min_size=1, max_size=9))
def test_a_magnitude_becomes_the_same_flux_wherever_it_stands(mags):
    zero = np.zeros(len(mags))
    together, _ = magnitudes_to_jy(np.array(mags), zero, 3631.0)
    alone = [magnitudes_to_jy(np.array([mag]), zero[:1], 3631.0)[0][0] for mag in mags]
    assert together.tolist() == alone
    np.testing.assert_allclose(together, 3631.0 * 10 ** (-0.4 * np.array(mags)), rtol=1e-13)


def test_one_compiled_version():
    assert len(_exp_flat.signatures) == 1


# ---- what leaves a band out


@pytest.mark.parametrize(
    ("value", "error", "keys", "told"),
    [
        (None, 1.0, {}, "panstarrs_g has no value"),
        (np.nan, 1.0, {}, "panstarrs_g has no value"),
        (-np.inf, 1.0, {}, "panstarrs_g has no value"),
        (1.0, None, {}, "panstarrs_g_error has no value"),
        (1.0, np.inf, {}, "panstarrs_g_error has no value"),
        (1.0, 0.0, {}, "panstarrs_g_error is not positive"),
        (1.0, -1.0, {}, "panstarrs_g_error is not positive"),
        (1.0, 1.0, {"bad": [True]}, "bad is true"),
        (None, None, {"bad": [True]}, "bad is true"),
        (99.0, 99.0, {"unit": "mag", "system": "AB"}, "panstarrs_g is a placeholder"),
        (-999.0, 0.1, {"unit": "mag", "system": "AB"}, "panstarrs_g is a placeholder"),
        (None, 1.0, {"limit": [True]}, "panstarrs_g has no value"),
        (-1.0, None, {"limit": [True]}, "panstarrs_g_error has no value"),
        (1e308, 1.0, {"unit": "MJy"}, "panstarrs_g or panstarrs_g_error is out of range"),
    ],
)
def test_band_that_cannot_be_used(value, error, keys, told):
    ingested = fluxes([value], [error], **keys)
    assert len(ingested.stars) == 0
    assert reasons(ingested) == [(0, "too few bands", f"0 usable of 1 needed: {told}")]


@pytest.mark.parametrize("value", [-5.0, 0.0, 1e-30, 99.0, -999.0])
def test_negative_and_odd_fluxes_are_data(value):
    assert fluxes([value], [1.0]).stars.flux_jy[0, 0] == value * 1e-9


def test_null_mark_is_false():
    found = fluxes([1.0, 1.0], [1.0, 1.0], bad=[None, False], limit=[None, True]).stars
    assert found.usable[:, 0].tolist() == [True, True]
    assert found.limit[:, 0].tolist() == [False, True]


def test_limits():
    found = fluxes([6.0, 6.0, 6.0, -1.0], [None, 0.0, 1.0, 1.0], unit="Jy", limit=[True] * 4, limit_sigma=5.0).stars
    assert found.flux_jy[:, 0].tolist() == [6.0, 6.0, 6.0, -1.0]
    assert found.error_jy[:, 0].tolist() == [1.2, 1.2, 1.0, 1.0]
    assert found.limit.all()


def test_limit_in_magnitudes():
    found = fluxes([20.0], [None], unit="mag", system="AB", limit=[True]).stars
    assert found.flux_jy[0, 0] == pytest.approx(3631e-8, rel=1e-12)
    assert found.error_jy[0, 0] == pytest.approx(3631e-8 / 3, rel=1e-12)


def test_unusable_bands_hold_0_and_1_and_are_no_limits():
    table = with_column(stars(2), "panstarrs_r", pa.array([None, 5.0], pa.float64()))
    table = with_column(table, "limit", [True, False])
    photometry = [band("panstarrs_g"), band("panstarrs_r", limit="limit"), band("panstarrs_i")]
    found = run(table, input__photometry=photometry, input__min_bands=2).stars
    assert found.usable.tolist() == [[True, False, True], [True, True, True]]
    assert (found.flux_jy[0, 1], found.error_jy[0, 1]) == (0.0, 1.0)
    assert not found.limit.any()


# ---- parallaxes, distances, priors


def parallaxes(values, errors, **changes):
    table = with_column(stars(len(values)), "parallax", pa.array(values, pa.float64()))
    found = run(with_column(table, "parallax_error", pa.array(errors, pa.float64())), **changes).stars
    return found.parallax_mas.tolist(), found.parallax_error_mas.tolist()


def test_zero_point_is_subtracted_and_the_error_scaled_in_mas():
    value, error = parallaxes(
        [2.0, -1.0],
        [0.1, 0.2],
        input__parallax__unit="arcsec",
        input__parallax__zero_point=-0.5,
        input__parallax__error_scale=2.0,
    )
    assert value == pytest.approx([2500.0, -500.0])
    assert error == pytest.approx([200.0, 400.0])


def test_zero_point_and_scale_from_columns():
    value, error = parallaxes([5.0], [0.5], input__parallax__zero_point="dec", input__parallax__error_scale="ra")
    table = stars(1)
    assert value == [5.0 - table["dec"][0].as_py()]
    assert error == [0.5 * table["ra"][0].as_py()]


@pytest.mark.parametrize(
    ("value", "error"),
    [(None, 0.1), (np.nan, 0.1), (np.inf, 0.1), (5.0, None), (5.0, 0.0), (5.0, -1.0), (5.0, np.nan)],
)
def test_parallax_that_cannot_be_used_is_none(value, error):
    found = parallaxes([value, 5.0], [error, 0.1])
    assert np.isnan([found[0][0], found[1][0]]).all()
    assert (found[0][1], found[1][1]) == (5.0, 0.1)


def test_infinity_less_infinity_is_no_parallax():
    table = with_column(stars(2), "parallax", [np.inf, 1e308])
    table = with_column(with_column(table, "zero", [np.inf, 0.0]), "scale", [1.0, 1e308])
    columns = {"value": "parallax", "error": "parallax_error", "unit": "deg", "zero_point": "zero"}
    found = run(table, input__parallax=columns | {"error_scale": "scale"}).stars
    assert np.isnan([found.parallax_mas, found.parallax_error_mas]).all()


def test_distances():
    table = with_column(stars(5), "d", pa.array([0.1, 0.0, None, 0.1, 1e308]))
    table = with_column(table, "d_error", pa.array([0.01, 0.01, 0.01, -1.0, 0.01]))
    distance = {"value": "d", "error": "d_error", "unit": "kpc"}
    found = run(table, input__parallax=None, input__distance=distance).stars
    assert found.distance_pc[0] == pytest.approx(100.0)
    assert found.distance_error_pc[0] == pytest.approx(10.0)
    assert np.isnan(found.distance_pc[1:]).all()
    assert np.isnan(found.distance_error_pc[1:]).all()
    assert np.isnan(found.parallax_mas).all()


def test_prior_parameters_are_numbers_or_columns():
    found = run(stars(3)).stars
    assert found.av_scale.tolist() == [0.3] * 3
    assert found.length_scale_pc.tolist() == [1350.0] * 3
    table = with_column(with_column(stars(3), "ebv", [0.1, 0.2, 0.3]), "scale", pa.array([500, 600, 700]))
    found = run(table, model__extinction__scale="ebv", model__distance__length_scale_pc="scale").stars
    assert found.av_scale.tolist() == [0.1, 0.2, 0.3]
    assert found.length_scale_pc.tolist() == [500.0, 600.0, 700.0]


@pytest.mark.parametrize(
    ("extinction", "kept", "told"),
    [
        ({"scale": "x"}, [0.2, 7.0], "column 'x' is missing or not positive"),
        (
            {"prior": "gaussian", "mean": "x", "scale": 0.1},
            [0.2, 0.0, -1.0, 7.0],
            "'x' is missing or not a number",
        ),
        (
            {"prior": "fixed", "mean": "x"},
            [0.2, 0.0],
            "'x' is missing or not between 0 and model.extinction.max = 6",
        ),
    ],
)
def test_rows_without_a_prior_are_rejected(extinction, kept, told):
    values = [0.2, 0.0, -1.0, 7.0, None, np.nan, np.inf]
    ingested = run(with_column(stars(7), "x", pa.array(values, pa.float64())), model__extinction=extinction)
    taken = ingested.stars.av_mean if "mean" in extinction else ingested.stars.av_scale
    assert taken.tolist() == kept
    assert {reason for _, reason, _ in reasons(ingested)} == {"no prior"}
    assert all(told in detail for *_, detail in reasons(ingested))


# ---- rejected rows


def test_every_row_is_kept_or_rejected_in_input_order():
    table = with_column(stars(6), "star_id", pa.array([1, None, 3, 3, 5, 6], pa.int64()))
    table = with_column(table, "_duplicate", pa.array([0, 0, 1, 2, 0, 0], pa.int8()))
    table = with_column(table, "panstarrs_r", pa.array([1, None, 1, None, None, 1], pa.float64()))
    table = with_column(table, "panstarrs_i_error", pa.array([1, 1, 1, 1, -1, 1], pa.float64()))
    ingested = run(table, input__carry=["dec"])
    assert reasons(ingested) == [
        (1, "no id", "column 'star_id' is null or empty"),
        (3, "duplicate id", "an earlier row has the same 'star_id'"),
        (
            4,
            "too few bands",
            "1 usable of 3 needed: panstarrs_r has no value, panstarrs_i_error is not positive",
        ),
    ]
    assert ingested.rejected.schema.equals(rejected_schema(pa.field("star_id", pa.int64())))
    assert ingested.rejected["star_id"].to_pylist() == [None, 3, 5]
    assert ingested.rejected["input_file"].to_pylist() == ["stars.parquet"] * 3
    assert ingested.rejected["kind"].to_pylist() == ["data"] * 3
    assert ingested.stars.ids == [b"1", b"3", b"6"]
    assert ingested.kept.column_names == ["star_id", "dec", "_input_file", "_input_row", "_duplicate"]
    assert ingested.kept["_input_row"].to_pylist() == [0, 2, 5]
    assert ingested.kept["_duplicate"].to_pylist() == [0, 1, 0]
    assert ingested.is_kept.tolist() == [True, False, True, False, False, True]


def test_string_ids():
    ingested = run(with_column(stars(3), "star_id", ["α", "", None]))
    assert ingested.stars.ids == ["α".encode()]
    assert [reason for _, reason, _ in reasons(ingested)] == ["no id", "no id"]


@given(st.lists(st.integers(0, 3), max_size=8), st.integers(1, 3))
def test_bands_are_counted(missing, needed):
    """A row that lacks k of three bands is kept exactly if 3 - k are enough."""
    table = stars(len(missing))
    for place, label in enumerate(BANDS):
        values = [None if k > place else 1.0 for k in missing]
        table = with_column(table, label, pa.array(values, pa.float64()))
    ingested = run(table, input__min_bands=needed)
    enough = [3 - k >= needed for k in missing]
    assert ingested.is_kept.tolist() == enough
    assert ingested.stars.usable.sum(axis=1).tolist() == [3 - k for k in missing if 3 - k >= needed]
    assert len(ingested.rejected) == enough.count(False)


@given(st.permutations(range(5)), st.integers(0, 5))
def test_a_star_does_not_depend_on_its_neighbours(order, cut):
    whole = run(stars(5)).stars
    shuffled = stars(5).take(pa.array(order))
    for part, places in ((shuffled.slice(0, cut), order[:cut]), (shuffled.slice(cut), order[cut:])):
        found = run(part).stars
        for field in dataclasses.fields(found):
            expected = getattr(whole, field.name)
            for value, k in zip(getattr(found, field.name), places, strict=True):
                np.testing.assert_array_equal(value, expected[k])


def test_no_rows_and_none_kept():
    nothing = run(stars(0))
    assert (len(nothing.stars), len(nothing.kept), len(nothing.rejected)) == (0, 0, 0)
    assert nothing.stars.flux_jy.shape == (0, 3)
    none_kept = run(with_column(stars(2), "star_id", pa.nulls(2, pa.int64())))
    assert none_kept.stars.flux_jy.shape == (0, 3)
    assert len(none_kept.rejected) == 2


def test_arrays_are_as_the_kernels_take_them():
    found = run(stars(3)).stars
    for field in dataclasses.fields(found):
        values = getattr(found, field.name)
        if field.name != "ids":
            assert values.flags.c_contiguous
            assert values.flags.writeable
            assert values.dtype == (bool if field.name in ("usable", "limit") else np.float64)


# ---- speed

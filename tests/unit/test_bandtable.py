"""The band table against direct integration, at its nodes, its ends and between."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from starkiln.physics.bandtable import (
    ExtinctionRangeWarning,
    build_band_table,
    ln_band_flux,
    ln_flux,
)
from starkiln.physics.constants import AB_ZERO_JY
from starkiln.physics.extinction import extinction_ratio
from starkiln.physics.passbands import Passband, builtin_names, load_passband

TEFF_MIN_K, TEFF_MAX_K, AV_MAX = 1500.0, 60_000.0, 6.0


@pytest.fixture(scope="module")
def bands():
    return [load_passband(name) for name in builtin_names()]


@pytest.fixture(scope="module")
def table(bands):
    return build_band_table(bands, TEFF_MIN_K, TEFF_MAX_K, AV_MAX, "G23", 3.1)


def direct(passband, teff_k, av_mag, law="G23", rv=3.1):
    ratio = extinction_ratio(law, rv, passband.quadrature[0])
    return ln_band_flux(passband, ratio, np.atleast_1d(teff_k), np.atleast_1d(av_mag))


def from_table(table, teff_k, av_mag):
    """Return the table's values for every pair of temperature and extinction, bands first."""
    pairs = np.meshgrid(teff_k, av_mag, indexing="ij")
    flat = ln_flux(table, pairs[0].ravel(), pairs[1].ravel())
    return np.moveaxis(flat.reshape(*pairs[0].shape, -1), -1, 0)


def test_table_is_within_1e_4_everywhere(bands, table):
    random = np.random.default_rng(20_261_201)
    ends_k = np.linspace(TEFF_MIN_K, 1600.0, 20)
    teff_k = np.concatenate([np.exp(random.uniform(*np.log([TEFF_MIN_K, TEFF_MAX_K]), 60)), ends_k])
    teff_k = np.append(teff_k, [TEFF_MIN_K, TEFF_MAX_K])
    av_mag = np.concatenate([[0.0, 0.05, 0.125, 5.9, AV_MAX], random.uniform(0.0, AV_MAX, 6)])
    found = from_table(table, teff_k, av_mag)
    for passband, values in zip(bands, found, strict=True):
        error = np.abs(values - direct(passband, teff_k, av_mag)).max()
        assert error < 1e-4, passband.name


def test_shape_and_layout(bands, table):
    assert table.coef.shape == (len(bands), table.n_teff + 2, table.n_av + 2)
    assert table.coef.flags.c_contiguous
    assert table.coef.dtype == np.float64
    assert np.isfinite(table.coef).all()
    assert table.ln_teff_step == pytest.approx(math.log(40.0) / 256.0)
    assert table.ln_teff_min < math.log(TEFF_MIN_K)
    assert table.ln_teff_min + (table.n_teff - 1) * table.ln_teff_step > math.log(TEFF_MAX_K)


def test_coefficients_give_the_values_at_the_nodes(bands, table):
    along_teff = (table.coef[:, :-2] + 4.0 * table.coef[:, 1:-1] + table.coef[:, 2:]) / 6.0
    nodes = (along_teff[..., :-2] + 4.0 * along_teff[..., 1:-1] + along_teff[..., 2:]) / 6.0
    teff_k = np.exp(table.ln_teff_min + table.ln_teff_step * np.arange(table.n_teff))
    av_mag = table.av_step * np.arange(table.n_av)
    band = builtin_names().index("gaia_dr3_g")
    np.testing.assert_allclose(nodes[band], direct(bands[band], teff_k, av_mag), atol=1e-11)


def test_the_coldest_far_ultraviolet_stays_finite(table):
    # At 1500 K the far ultraviolet has about exp(-60) of the peak: the sum must not underflow.
    band = builtin_names().index("galex_fuv")
    value = ln_flux(table, 1500.0, 6.0)[0, band]
    assert -60.0 < value < -10.0


@pytest.mark.parametrize(
    ("teff_min_k", "teff_max_k", "av_max"),
    [(2500.0, 8000.0, 1.3), (5000.0, 5001.0, 0.0), (1000.0, 1e5, 20.0)],
)
def test_other_ranges_are_as_accurate(teff_min_k, teff_max_k, av_max):
    bands = [load_passband(name) for name in ("sdss_u", "johnson_v", "2mass_ks")]
    table = build_band_table(bands, teff_min_k, teff_max_k, av_max, "F19", 2.7)
    assert table.n_av >= 4
    teff_k = np.geomspace(teff_min_k, teff_max_k, 33)
    av_mag = np.linspace(0.0, av_max, 17)
    found = from_table(table, teff_k, av_mag)
    for passband, values in zip(bands, found, strict=True):
        np.testing.assert_allclose(values, direct(passband, teff_k, av_mag, "F19", 2.7), atol=1e-4)


def test_two_builds_are_the_same_bits(bands, table):
    again = build_band_table(bands, TEFF_MIN_K, TEFF_MAX_K, AV_MAX, "G23", 3.1)
    assert again.coef.tobytes() == table.coef.tobytes()


def test_a_band_does_not_depend_on_its_neighbours(bands, table):
    alone = build_band_table(bands[3:4], TEFF_MIN_K, TEFF_MAX_K, AV_MAX, "G23", 3.1)
    assert alone.coef[0].tobytes() == table.coef[3].tobytes()


@settings(max_examples=50)
@given(teff_k=st.floats(TEFF_MIN_K, 59_000.0), av_mag=st.floats(0.0, 5.9), factor=st.floats(1.001, 1.01))
def test_hotter_is_brighter_and_dustier_is_fainter_in_every_band(table, teff_k, av_mag, factor):
    here = ln_flux(table, teff_k, av_mag)
    assert np.all(ln_flux(table, teff_k * factor, av_mag) > here)
    assert np.all(ln_flux(table, teff_k, av_mag + 0.05) < here)


def box(wavelength_um):
    return Passband(
        name="box",
        wavelength_um=np.asarray(wavelength_um),
        throughput=np.ones(len(wavelength_um)),
        detector="photon",
        system="AB",
        zero_point_jy=AB_ZERO_JY,
        zero_point_error=0.0,
        source="",
        curve_source="",
    )


def test_a_narrow_band_gives_the_monochromatic_flux():
    narrow = box([0.549999, 0.55, 0.550001])
    table = build_band_table([narrow], 3000.0, 10_000.0, 3.0, "G23", 3.1)
    # pi B_nu(5772 K) at 550 nm from Planck's law, typed out with CODATA 2018 constants.
    x = 6.62607015e-34 * 299_792_458.0 / (550e-9 * 1.380649e-23 * 5772.0)
    expected_jy = math.pi * 2.0 * 6.62607015e-34 * 299_792_458.0 / 550e-9**3 / math.expm1(x) / 1e-26
    dimming = 0.4 * math.log(10.0) * 1.7 * float(extinction_ratio("G23", 3.1, 0.55))
    assert ln_flux(table, 5772.0, 1.7)[0, 0] == pytest.approx(math.log(expected_jy) - dimming, abs=1e-6)


@pytest.mark.parametrize(
    ("teff_k", "av_mag"), [(1300.0, 0.0), (70_000.0, 0.0), (5000.0, -0.1), (5000.0, 6.5)]
)
def test_outside_the_table_is_an_error(table, teff_k, av_mag):
    with pytest.raises(ValueError, match="outside the table"):
        ln_flux(table, teff_k, av_mag)


def test_nan_is_an_error(table):
    with pytest.raises(ValueError, match="outside the table"):
        ln_flux(table, np.nan, 0.0)


def test_a_law_that_ends_before_a_band_is_said():
    bands = [load_passband("johnson_v"), load_passband("wise_w2")]
    with pytest.warns(ExtinctionRangeWarning, match=r"CCM89 was published for 0\.1 to 3\.33 um; in wise_w2"):
        build_band_table(bands, 5000.0, 6000.0, 1.0, "CCM89", 3.1)


def test_a_sliver_beyond_a_law_is_not_worth_a_warning():
    # CCM89 ends at 3.333 um, and 0.6 per cent of this band's response lies beyond.
    build_band_table([box([2.0, 2.5, 3.0, 3.343])], 5000.0, 6000.0, 1.0, "CCM89", 3.1)
    with pytest.warns(ExtinctionRangeWarning, match="in box"):
        build_band_table([box([2.0, 2.5, 3.0, 3.363])], 5000.0, 6000.0, 1.0, "CCM89", 3.1)

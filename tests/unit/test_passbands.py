"""Passbands: band averages with known answers, zero points, user curves and their errors."""

import dataclasses
import subprocess
import sys

import numpy as np
import pytest
from astropy import units as u
from astropy.table import Table

from starkiln.errors import SettingsError, UnknownPassband
from starkiln.physics.passbands import (
    Passband,
    builtin_names,
    describe_passbands,
    load_passband,
    read_passband,
    zero_point_jy,
)
from starkiln.physics.planck import exitance_jy

CONTRACT_NAMES = [
    "galex_fuv", "galex_nuv", "sdss_u", "sdss_g", "sdss_r", "sdss_i", "sdss_z",
    "panstarrs_g", "panstarrs_r", "panstarrs_i", "panstarrs_z", "panstarrs_y",
    "gaia_dr3_g", "gaia_dr3_bp", "gaia_dr3_rp", "gaia_dr2_g", "gaia_dr2_bp", "gaia_dr2_rp",
    "johnson_u", "johnson_b", "johnson_v", "cousins_r", "cousins_i", "2mass_j", "2mass_h", "2mass_ks",
    "wise_w1", "wise_w2", "wise_w3", "wise_w4",
    "decam_u", "decam_g", "decam_r", "decam_i", "decam_z", "decam_y",
    "rubin_u", "rubin_g", "rubin_r", "rubin_i", "rubin_z", "rubin_y",
    "euclid_vis", "euclid_y", "euclid_j", "euclid_h",
]  # fmt: skip


def passband(wavelength_um, throughput, detector="photon"):
    return Passband(
        name="test",
        wavelength_um=np.asarray(wavelength_um, dtype=float),
        throughput=np.asarray(throughput, dtype=float),
        detector=detector,
        system="AB",
        zero_point_jy=3631.0,
        zero_point_error=0.0,
        source="",
        curve_source="",
    )


def box(detector):
    return passband([0.5, 0.6, 0.7, 0.8], [1.0, 1.0, 1.0, 1.0], detector)


def test_builtin_names():
    assert builtin_names() == CONTRACT_NAMES


@pytest.mark.parametrize("detector", ["photon", "energy"])
def test_average_of_a_constant_is_the_constant(detector):
    assert box(detector).average(np.ones_like) == pytest.approx(1.0, abs=1e-14)


@pytest.mark.parametrize("power", [-4, -1, 1, 3])
@pytest.mark.parametrize(("detector", "extra"), [("photon", 0), ("energy", 1)])
def test_average_of_a_power_law_over_a_box(power, detector, extra):
    def integral(exponent):  # ∫ λ^exponent dλ from 0.5 to 0.8
        if exponent == -1:
            return np.log(0.8 / 0.5)
        return (0.8 ** (exponent + 1) - 0.5 ** (exponent + 1)) / (exponent + 1)

    expected = integral(power - 1 - extra) / integral(-1 - extra)
    found = box(detector).average(lambda wavelength_um: wavelength_um**power)
    assert found == pytest.approx(expected, rel=1e-11)


@pytest.mark.parametrize("name", CONTRACT_NAMES)
def test_quadrature_is_good_to_1e_6_for_the_coldest_blackbody(name):
    band = load_passband(name)
    fine_um = np.geomspace(band.wavelength_um[0], band.wavelength_um[-1], 200_000)
    fine_um = np.union1d(fine_um, band.wavelength_um)
    response = np.interp(fine_um, band.wavelength_um, band.throughput)
    response /= fine_um ** (1 if band.detector == "photon" else 2)
    expected = np.trapezoid(response * exitance_jy(fine_um, 1500.0), fine_um)
    expected /= np.trapezoid(response, fine_um)
    assert band.average(lambda um: exitance_jy(um, 1500.0)) == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize("name", ["johnson_b", "gaia_dr3_g", "galex_fuv", "wise_w3"])
def test_pivot_converts_flux_per_wavelength_exactly(name):
    band = load_passband(name)
    nodes_um, weights = band.quadrature
    f_nu = exitance_jy(nodes_um, 4000.0)
    # <f_lambda> weighs with S λ dλ (photon) or S dλ (energy): the weights of <f_nu> times λ².
    f_lambda = f_nu / nodes_um**2
    mean_f_lambda = np.sum(weights * nodes_um**2 * f_lambda) / np.sum(weights * nodes_um**2)
    assert mean_f_lambda * band.pivot_um**2 == pytest.approx(np.sum(weights * f_nu), rel=1e-12)


@pytest.mark.parametrize(
    ("name", "pivot_um"),
    [
        # Published pivot wavelengths: Riello et al. 2021 (Gaia EDR3), Tonry et al. 2012 table 4 (Pan-STARRS);
        # both from memory.
        ("gaia_dr3_g", 0.6218),
        ("gaia_dr3_bp", 0.5110),
        ("gaia_dr3_rp", 0.7769),
        ("panstarrs_g", 0.4849),
        ("panstarrs_y", 0.9620),
    ],
)
def test_published_pivot_wavelengths(name, pivot_um):
    assert load_passband(name).pivot_um == pytest.approx(pivot_um, rel=1e-3)


def test_detector_matters_only_through_the_weights():
    photon, energy = box("photon"), box("energy")
    assert photon.pivot_um == pytest.approx(np.sqrt((0.8**2 - 0.5**2) / 2 / np.log(0.8 / 0.5)), rel=1e-9)
    assert energy.pivot_um == pytest.approx(np.sqrt(0.5 * 0.8), rel=1e-9)


def test_sdss_u_has_no_response_between_wing_and_red_leak():
    band = load_passband("sdss_u")
    assert np.all(np.interp([0.43, 0.5, 0.6, 0.7, 0.755], band.wavelength_um, band.throughput) == 0.0)
    assert np.interp(0.772, band.wavelength_um, band.throughput) > 0.0


def test_ab_zero_point_is_3631_jy_in_every_band():
    assert {zero_point_jy(load_passband(name), "AB") for name in CONTRACT_NAMES} == {3631.0}


def test_vega_zero_point_of_a_vega_band():
    assert zero_point_jy(load_passband("2mass_j"), "Vega") == 1594.0


def test_vega_zero_point_of_an_ab_band_is_refused():
    with pytest.raises(SettingsError, match=r"'sdss_g' has no Vega zero point; give zero_point_jy"):
        zero_point_jy(load_passband("sdss_g"), "Vega")


def test_editions_of_gaia_differ():
    assert load_passband("gaia_dr2_g").zero_point_jy != load_passband("gaia_dr3_g").zero_point_jy


@pytest.mark.parametrize("band", ["g", "bp", "rp"])
def test_gaia_without_edition_names_both(band):
    with pytest.raises(UnknownPassband, match=rf"gaia_dr3_{band} or gaia_dr2_{band}"):
        load_passband(f"gaia_{band}")


def test_unknown_name_gives_the_nearest():
    with pytest.raises(UnknownPassband, match=r"'panstars_g' \(did you mean 'panstarrs_g'\?\)"):
        load_passband("panstars_g")


def test_digest_tells_curve_detector_and_zero_point_apart_and_nothing_else():
    band = load_passband("wise_w1")
    assert band.digest() == load_passband("wise_w1").digest()
    assert band.digest() == dataclasses.replace(band, name="other", source="other").digest()
    others = [
        dataclasses.replace(band, detector="energy"),
        dataclasses.replace(band, zero_point_jy=310.0),
        dataclasses.replace(band, throughput=band.throughput * 1.001),
        dataclasses.replace(band, wavelength_um=band.wavelength_um + 1e-4),
    ]
    assert len({band.digest(), *(other.digest() for other in others)}) == 5


def test_description_lists_every_band():
    rows = describe_passbands()
    assert [row["name"] for row in rows] == CONTRACT_NAMES
    by_name = {row["name"]: row for row in rows}
    assert by_name["johnson_v"]["detector"] == "energy"
    assert by_name["sdss_g"]["zero_point_vega_jy"] is None
    assert by_name["wise_w4"]["zero_point_vega_jy"] == 8.363
    for row in rows:
        assert row["source"]
        assert 0.0 < row["zero_point_error"] < 0.06
        assert 0.15 < row["pivot_um"] < 23.0


def test_importing_the_module_stays_light():
    code = (
        "import sys, starkiln.physics.passbands, starkiln.physics.bandtable\n"
        "heavy = {'astropy.table', 'dust_extinction', 'speclite', 'scipy.linalg', 'pandas', 'pyarrow'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code], capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"


@pytest.fixture
def curve():
    return Table({"wavelength": [400.0, 450.0, 500.0, 550.0] * u.nm, "throughput": [0.0, 0.5, 0.4, 0.0]})


def test_read_ecsv_and_votable_alike(tmp_path, curve):
    curve.write(tmp_path / "blue.ecsv")
    curve.write(tmp_path / "blue.vot", format="votable")
    from_ecsv = read_passband(tmp_path / "blue.ecsv", "blue", "energy", 4000.0, 0.02, "made up")
    from_votable = read_passband(tmp_path / "blue.vot", "blue", "energy", 4000.0, 0.02, "made up")
    assert from_ecsv.digest() == from_votable.digest()
    np.testing.assert_allclose(from_ecsv.wavelength_um, [0.40, 0.45, 0.50, 0.55])
    assert (from_ecsv.detector, from_ecsv.system, from_ecsv.zero_point_error) == ("energy", "Vega", 0.02)
    assert zero_point_jy(from_ecsv, "Vega") == 4000.0


def test_read_without_zero_point_serves_ab_magnitudes_only(tmp_path, curve):
    curve.write(tmp_path / "blue.ecsv")
    band = read_passband(tmp_path / "blue.ecsv", "blue")
    assert zero_point_jy(band, "AB") == 3631.0
    with pytest.raises(SettingsError, match="no Vega zero point"):
        zero_point_jy(band, "Vega")


def test_scale_and_unit_of_the_curve_do_not_matter(tmp_path, curve):
    curve.write(tmp_path / "a.ecsv")
    curve["wavelength"] = curve["wavelength"].to(u.AA)
    curve["throughput"] *= 100.0
    curve.rename_column("wavelength", "lambda")
    curve.write(tmp_path / "b.ecsv")
    one, other = read_passband(tmp_path / "a.ecsv", "a"), read_passband(tmp_path / "b.ecsv", "b")
    assert one.average(np.square) == pytest.approx(other.average(np.square), rel=1e-12)


def test_zeros_around_the_response_are_dropped(tmp_path):
    wide = Table(
        {
            "wavelength": np.arange(100.0, 1100.0, 100.0) * u.nm,
            "throughput": [0.0] * 4 + [1.0, 1.0] + [0.0] * 4,
        }
    )
    wide.write(tmp_path / "wide.ecsv")
    np.testing.assert_allclose(
        read_passband(tmp_path / "wide.ecsv", "wide").wavelength_um, [0.4, 0.5, 0.6, 0.7]
    )


def test_masked_rows_of_a_votable_are_errors(tmp_path, curve):
    masked = Table(curve, masked=True)
    masked["throughput"].mask[2] = True
    masked.write(tmp_path / "m.vot", format="votable")
    with pytest.raises(SettingsError, match=r"m\.vot, column 'throughput', row 3: is missing or not finite"):
        read_passband(tmp_path / "m.vot", "m")


def no_unit(table):
    table["wavelength"] = np.asarray(table["wavelength"].value)


def wrong_unit(table):
    table["wavelength"] = table["wavelength"].value * u.s


def negative(table):
    table["throughput"][1] = -0.1


def unsorted(table):
    table["wavelength"][2] = 440.0


def repeated(table):
    table["wavelength"][2] = 450.0


def not_a_number(table):
    table["throughput"][1] = np.nan


def all_zero(table):
    table["throughput"][:] = 0.0


def too_few(table):
    table.remove_rows([3])


def no_wavelength(table):
    table["wavelength"][0] = 0.0


def text(table):
    table["throughput"] = ["a", "b", "c", "d"]


def third_column(table):
    table.rename_column("throughput", "response")
    table["error"] = 0.1


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (no_unit, r"column 'wavelength': has no unit; give a wavelength's, such as nm"),
        (wrong_unit, r"column 'wavelength': has the unit s; give a wavelength's"),
        (negative, r"column 'throughput', row 2: is below zero"),
        (unsorted, r"column 'wavelength', row 3: does not rise; sort"),
        (repeated, r"column 'wavelength', row 3: does not rise"),
        (not_a_number, r"column 'throughput', row 2: is missing or not finite"),
        (all_zero, r"column 'throughput': is zero everywhere"),
        (too_few, r"3 points are too few; a curve has 4 or more"),
        (no_wavelength, r"column 'wavelength', row 1: is not above zero"),
        (text, r"column 'throughput': must hold one number per row"),
        (
            third_column,
            r"has the columns 'wavelength' and 'throughput'; this file has wavelength, response, error",
        ),
    ],
)
def test_unusable_curves(tmp_path, curve, spoil, message):
    spoil(curve)
    path = tmp_path / "bad.ecsv"
    curve.write(path)
    with pytest.raises(SettingsError, match=message) as caught:
        read_passband(path, "bad")
    assert str(caught.value).startswith(str(path))
    assert len(str(caught.value).splitlines()) == 1


def test_two_columns_without_a_wavelength_unit(tmp_path):
    Table({"a": [1.0, 2.0, 3.0, 4.0], "b": [1.0, 1.0, 1.0, 1.0]}).write(tmp_path / "bad.ecsv")
    with pytest.raises(
        SettingsError, match="exactly one of the columns a, b must carry a unit of wavelength"
    ):
        read_passband(tmp_path / "bad.ecsv", "bad")


def test_files_that_are_not_curves(tmp_path):
    with pytest.raises(SettingsError, match=r"none\.ecsv: no such passband curve"):
        read_passband(tmp_path / "none.ecsv", "none")
    (tmp_path / "text.ecsv").write_text("hello\n")
    with pytest.raises(SettingsError, match=r"text\.ecsv: cannot be read as ascii\.ecsv"):
        read_passband(tmp_path / "text.ecsv", "text")
    (tmp_path / "broken.vot").write_text("<VOTABLE>")
    with pytest.raises(SettingsError, match=r"broken\.vot: cannot be read as votable"):
        read_passband(tmp_path / "broken.vot", "broken")
    (tmp_path / "curve.csv").write_text("1,2\n")
    with pytest.raises(SettingsError, match=r"curve\.csv: a passband curve is an ECSV \(\.ecsv\) or VOTable"):
        read_passband(tmp_path / "curve.csv", "curve")

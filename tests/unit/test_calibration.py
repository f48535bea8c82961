"""Learning departures: curves, factors, relations between systems, transfer between bands, the published tables."""

import numpy as np
import pytest

from starkiln.calibration import relations
from starkiln.calibration.builtin import Locus, learn_builtin
from starkiln.calibration.curves import at_nodes, basis, choose_smoothness, fit_curve
from starkiln.calibration.dwarfs import PASSBANDS, Dwarfs, read_dwarfs
from starkiln.calibration.factors import choose_n_factors, learn_factors
from starkiln.calibration.learn import (
    blackbody_ln_flux,
    departure_points,
    ln_flux_jy,
    ln_omega,
    temperature_slope,
)
from starkiln.calibration.sequence import MeanSequence, read_mean_sequence
from starkiln.calibration.spectral import transfer
from starkiln.errors import SettingsError
from starkiln.physics.departures import LN_TEFF_NODES
from starkiln.physics.passbands import load_passband
from starkiln.physics.planck import exitance_jy

TEFF_NODES_K = np.exp(LN_TEFF_NODES)


# ---- curves


def test_splines_sum_to_one():
    teff_k = np.geomspace(1000.0, 100_000.0, 300)
    np.testing.assert_allclose(basis(teff_k).sum(axis=1), 1.0)
    assert basis(teff_k).min() >= 0.0


def wave(teff_k):
    return 0.3 * np.sin(4.0 * np.log(teff_k))


def test_a_curve_goes_through_exact_points():
    teff_k = np.geomspace(2000.0, 40_000.0, 120)
    curve = fit_curve(teff_k, wave(teff_k), np.full(120, 0.02), 0.01)
    between_k = np.geomspace(2100.0, 38_000.0, 57)
    np.testing.assert_allclose(basis(between_k) @ curve, wave(between_k), atol=1e-3)
    inside = (TEFF_NODES_K > 2100.0) & (TEFF_NODES_K < 38_000.0)
    np.testing.assert_allclose(at_nodes(curve)[inside], wave(TEFF_NODES_K[inside]), atol=1e-3)


def test_odd_points_do_not_bend_a_curve():
    teff_k = np.geomspace(2000.0, 40_000.0, 120)
    values = wave(teff_k)
    values[5::11] += 1.0
    curve = fit_curve(teff_k, values, np.full(120, 0.02), 1.0)
    np.testing.assert_allclose(basis(teff_k) @ curve, wave(teff_k), atol=0.01)


def test_noise_asks_for_more_smoothness_than_a_clean_wave():
    rng = np.random.default_rng(5)
    teff_k = np.geomspace(2000.0, 40_000.0, 150)
    clean = wave(teff_k)[:, np.newaxis]
    noisy = clean + 0.05 * rng.standard_normal((150, 1))
    errors = np.full((150, 1), 0.05)
    assert choose_smoothness(teff_k, noisy, errors) > choose_smoothness(teff_k, clean, errors)


def test_smoothing_is_the_same_for_all_bands_and_skips_missing_points():
    rng = np.random.default_rng(6)
    teff_k = np.geomspace(2000.0, 40_000.0, 100)
    points = np.repeat(wave(teff_k)[:, np.newaxis], 2, axis=1) + 0.02 * rng.standard_normal((100, 1))
    points[20:30, 1] = np.nan
    errors = np.full(points.shape, 0.02)
    smoothness = choose_smoothness(teff_k, points, errors)
    known = np.isfinite(points[:, 1])
    whole = fit_curve(teff_k, points[:, 0], errors[:, 0], smoothness)
    holed = fit_curve(teff_k[known], points[known, 1], errors[known, 1], smoothness)
    np.testing.assert_allclose((basis(teff_k) @ whole)[40:], (basis(teff_k) @ holed)[40:], atol=2e-3)


# ---- factors

N_STARS, N_BANDS = 800, 8
LOADING = np.linspace(-0.10, 0.05, N_BANDS)
SLOPE = 10.0 * LOADING + 2.0 * np.cos(np.arange(N_BANDS))  # somewhat like the loading
SCATTER = np.linspace(0.02, 0.06, N_BANDS)


def invented_stars(n_factors, shift, seed=1, grey=0.0):
    """Return temperatures, residuals, errors and slopes of invented stars; a fifth of the bands are missing."""
    rng = np.random.default_rng(seed)
    teff_k = rng.uniform(2800.0, 4300.0, N_STARS)
    error = rng.uniform(0.005, 0.03, (N_STARS, N_BANDS))
    slope = np.repeat(SLOPE[np.newaxis], N_STARS, axis=0)
    residual = rng.standard_normal((N_STARS, N_BANDS)) * np.hypot(SCATTER, error)
    residual += shift * rng.standard_normal((N_STARS, 1)) * slope + grey * rng.standard_normal((N_STARS, 1))
    if n_factors:
        residual += rng.standard_normal((N_STARS, 1)) * LOADING
    missing = rng.random((N_STARS, N_BANDS)) < 0.2
    residual[missing] = error[missing] = np.nan
    return teff_k, residual, error, slope


def test_loadings_and_scatters_come_back():
    teff_k, residual, error, _ = invented_stars(1, 0.0)
    found = learn_factors(teff_k, residual, error, 1)
    loading = found.coefficient[0, 0] * np.sign(found.coefficient[0, 0, -1])
    np.testing.assert_allclose(loading, LOADING, atol=0.008)
    np.testing.assert_allclose(found.scatter, SCATTER, atol=0.006)
    np.testing.assert_allclose(found.coefficient[0, 1], 0.0, atol=0.015)
    assert found.shift.shape == (0,)


def test_photometric_noise_is_not_taken_for_scatter():
    teff_k, residual, error, _ = invented_stars(0, 0.0)
    noise = np.random.default_rng(2).standard_normal(residual.shape) * 0.04
    found = learn_factors(teff_k, residual + noise, np.hypot(error, 0.04), 0)
    np.testing.assert_allclose(found.scatter, SCATTER, atol=0.008)


def test_odd_bands_and_odd_stars_stay_out():
    teff_k, residual, error, _ = invented_stars(1, 0.0)
    residual[::50, 3] += 2.0
    residual[7] += 3.0
    found = learn_factors(teff_k, residual, error, 1)
    loading = found.coefficient[0, 0] * np.sign(found.coefficient[0, 0, -1])
    np.testing.assert_allclose(loading, LOADING, atol=0.012)
    np.testing.assert_allclose(found.scatter, SCATTER, atol=0.01)


@pytest.mark.parametrize("grey", [0.0, 0.03])
def test_the_scatter_of_temperatures_and_luminosities_is_told_from_a_factor(grey):
    teff_k, residual, error, slope = invented_stars(1, 0.02, grey=grey)
    found = learn_factors(teff_k, residual, error, 1, slope)
    assert found.shift == pytest.approx([0.02, grey], abs=0.004)
    loading = found.coefficient[0, 0] * np.sign(found.coefficient[0, 0, -1])
    np.testing.assert_allclose(loading, LOADING, atol=0.01)


@pytest.mark.parametrize("n_factors", [0, 1])
def test_left_out_stars_tell_the_number_of_factors(n_factors):
    teff_k, residual, error, _ = invented_stars(n_factors, 0.0)
    chosen, scores = choose_n_factors(teff_k[:300], residual[:300], error[:300])
    assert len(scores) == 3
    # A second factor of noise costs next to nothing; the first real one is worth much.
    assert chosen >= n_factors
    assert (scores[1] - scores[0] > 0.5) == (n_factors == 1)
    assert scores[2] - scores[1] < 0.1


def test_loadings_are_held_outside_the_sample():
    teff_k, residual, error, _ = invented_stars(1, 0.0)
    found = learn_factors(teff_k, residual, error, 1)
    loading = found.loading([1000.0, teff_k.min(), teff_k.max(), 20_000.0])
    np.testing.assert_allclose(loading[..., 0], loading[..., 1])
    np.testing.assert_allclose(loading[..., 3], loading[..., 2])


# ---- points


def test_the_departure_of_a_star_is_what_its_flux_was_multiplied_by():
    passbands = [load_passband(name) for name in ("johnson_b", "2mass_ks", "sdss_r")]
    teff_k, radius_rsun, distance_pc = np.array([4000.0, 9000.0]), np.array([0.6, 2.0]), np.array([10.0, 50.0])
    ln_d = np.array([[0.1, -0.2, 0.3], [0.0, 0.05, -0.4]])
    omega = (radius_rsun * 6.957e8 / (distance_pc * 3.0856775814913673e16)) ** 2
    flux_jy = np.array([[band.average(lambda x, t=t: exitance_jy(x, t)) for band in passbands] for t in teff_k])
    magnitude = np.stack(
        [
            -2.5 * np.log10(omega * flux_jy[:, place] * np.exp(ln_d[:, place]) / band.zero_point_jy)
            for place, band in enumerate(passbands)
        ],
        axis=1,
    )
    points = departure_points(passbands, teff_k, ln_omega(radius_rsun, distance_pc), ln_flux_jy(passbands, magnitude))
    np.testing.assert_allclose(points, ln_d, atol=1e-9)


def test_the_slope_in_temperature_of_a_blackbody():
    band = load_passband("2mass_ks")
    slope = temperature_slope([band], np.zeros((1, len(LN_TEFF_NODES))))[0]
    for node in (0, 1, 40, 128):
        here_k = TEFF_NODES_K[node]
        near = blackbody_ln_flux([band], here_k * np.exp([-1e-4, 1e-4]))[:, 0]
        # One-sided at the ends of the nodes, where the slope is that of some nodes inwards.
        assert slope[node] == pytest.approx((near[1] - near[0]) / 2e-4 - 4.0, abs=0.02 if 2 <= node <= 126 else 0.3)


# ---- relations


def test_sdss_of_johnson_is_the_published_line():
    # Jester et al. 2005, table 1, all stars with Rc-Ic < 1.15, written out for one star.
    u, b, v, r, i = (np.array([value]) for value in (5.5, 5.4, 4.8, 4.4, 4.1))
    sdss = relations.sdss_from_johnson(u, b, v, r, i)
    assert sdss["g"][0] == pytest.approx(4.8 + 0.60 * 0.6 - 0.12)
    assert sdss["r"][0] == pytest.approx(4.8 - 0.42 * 0.6 + 0.11)
    assert sdss["u"][0] - sdss["g"][0] == pytest.approx(1.28 * 0.1 + 1.13)
    assert sdss["r"][0] - sdss["i"][0] == pytest.approx(0.91 * 0.3 - 0.20)
    assert sdss["r"][0] - sdss["z"][0] == pytest.approx(1.72 * 0.3 - 0.41)


def test_red_stars_have_no_i_and_z_from_johnson():
    u, b, v, r, i = (np.array([value]) for value in (12.0, 10.8, 9.2, 8.0, 6.8))
    sdss = relations.sdss_from_johnson(u, b, v, r, i)
    assert np.isnan(sdss["i"][0])
    assert np.isnan(sdss["z"][0])
    assert np.isfinite(sdss["r"][0])


def test_panstarrs_of_johnson_obeys_the_published_polynomials():
    b, v, i = np.array([5.4, 11.0]), np.array([4.8, 9.6]), np.array([4.1, 7.6])
    panstarrs = relations.panstarrs_from_johnson(b, v, i)
    g_r = panstarrs["g"] - panstarrs["r"]
    np.testing.assert_allclose(b - panstarrs["g"], 0.212 + 0.556 * g_r + 0.034 * g_r**2, atol=1e-12)
    np.testing.assert_allclose(v - panstarrs["r"], 0.005 + 0.462 * g_r + 0.013 * g_r**2, atol=1e-12)


def test_two_published_relations_of_sdss_and_panstarrs_agree():
    # Finkbeiner et al. 2016 from SDSS to Pan-STARRS, Tonry et al. 2012 back, along the colours of F to K dwarfs.
    g_r = np.array([0.4, 0.6, 0.8, 1.0])
    sdss = {"g": 15.0 + g_r, "r": np.full(4, 15.0), "i": 15.0 - 0.37 * g_r + 0.02, "z": 15.0 - 0.55 * g_r + 0.07}
    back = relations.sdss_from_panstarrs(relations.panstarrs_from_sdss(sdss))
    for band in "griz":
        np.testing.assert_allclose(back[band], sdss[band], atol=0.03)


def test_pan_starrs_y_of_two_relations_agrees():
    # The y of Finkbeiner et al. 2016 comes from memory; that of Tonry et al. 2012 does not.
    g_r, g_i = np.array([0.5, 0.7, 0.9]), np.array([0.66, 0.93, 1.22])
    of_tonry = -(-0.031 + 0.111 * g_r + 0.004 * g_r**2)
    of_finkbeiner = 0.08924 - 0.20878 * g_i + 0.10360 * g_i**2 - 0.02441 * g_i**3
    np.testing.assert_allclose(of_tonry, of_finkbeiner, atol=0.02)


def test_blue_stars_reach_panstarrs_through_the_other_relation():
    sdss = {"g": np.array([14.6]), "r": np.array([15.0]), "i": np.array([15.2]), "z": np.array([15.3])}
    panstarrs = relations.panstarrs_from_sdss(sdss)
    g_r = panstarrs["g"] - panstarrs["r"]
    assert panstarrs["g"][0] + 0.013 + 0.145 * g_r[0] + 0.019 * g_r[0] ** 2 == pytest.approx(14.6)


def test_des_and_rubin_are_the_published_lines():
    sdss = {band: np.array([value]) for band, value in zip("griz", (16.0, 15.2, 14.9, 14.7), strict=True)}
    des = relations.des_from_sdss(sdss)
    assert des["g"][0] == pytest.approx(16.0 - 0.061 * 1.1 + 0.008)
    assert des["r"][0] == pytest.approx(15.2 - 0.155 * 0.3 - 0.007)
    rubin = relations.rubin_from_des(des)
    r_i = des["r"][0] - des["i"][0]
    assert rubin["i"][0] == pytest.approx(des["i"][0] + 0.150 * r_i - 0.003 * r_i**2 - 0.009)


def test_colours_beyond_the_published_ones_have_no_relation():
    sdss = {band: np.array([value]) for band, value in zip("griz", (20.0, 18.0, 15.5, 14.0), strict=True)}
    assert np.isnan(relations.des_from_sdss(sdss)["r"][0])
    assert np.isnan(relations.panstarrs_from_sdss(sdss)["g"][0])
    assert np.isnan(relations.gaia_dr3_from_johnson(np.array([15.0]), np.array([12.0]))["g"][0])


def test_gaia_of_the_sun():
    # G - V and BP - RP of the Sun: Casagrande & VandenBerg 2018, MNRAS 479, L102 (from memory), V - Ic = 0.71.
    gaia = relations.gaia_dr3_from_johnson(np.array([4.81]), np.array([4.10]))
    assert gaia["g"][0] == pytest.approx(4.67, abs=0.02)
    assert gaia["bp"][0] - gaia["rp"][0] == pytest.approx(0.82, abs=0.03)


# ---- transfer


def test_a_grey_departure_is_grey_in_every_band():
    known = [load_passband(name) for name in ("johnson_b", "johnson_v", "cousins_i", "2mass_j")]
    wanted = [load_passband(name) for name in ("sdss_g", "rubin_r", "panstarrs_y")]
    ln_d = np.full((4, 2), 0.25)
    np.testing.assert_allclose(transfer(known, ln_d, wanted, np.array([3000.0, 10_000.0])), 0.25, atol=1e-4)


def test_a_power_law_is_carried_to_the_bands_between():
    teff_k = np.array([3500.0, 6000.0])
    known = [load_passband(name) for name in ("johnson_b", "johnson_v", "cousins_r", "cousins_i", "2mass_j")]
    wanted = [load_passband(name) for name in ("sdss_g", "sdss_r", "rubin_i", "panstarrs_z")]

    def ln_d_of(band, teff):
        bright = band.average(lambda x: exitance_jy(x, teff) * (x / 0.7) ** 0.6)
        return np.log(bright / band.average(lambda x: exitance_jy(x, teff)))

    ln_d = np.array([[ln_d_of(band, teff) for teff in teff_k] for band in known])
    expected = np.array([[ln_d_of(band, teff) for teff in teff_k] for band in wanted])
    np.testing.assert_allclose(transfer(known, ln_d, wanted, teff_k), expected, atol=3e-3)


def test_nothing_is_made_of_nothing():
    known, wanted = [load_passband("johnson_b")], [load_passband("johnson_v")]
    found = transfer(known, np.array([[np.nan, 0.1]]), wanted, np.array([3000.0, 5000.0]))
    assert np.isnan(found[0, 0])
    assert found[0, 1] == pytest.approx(0.1, abs=1e-3)


# ---- the published tables

SEQUENCE = """# a comment
SpT   Teff  logT  BCv  logL  Mbol R_Rsun Mv   B-V   U-B   V-Rc  V-Ic V-Ks  J-H   H-Ks  Ks-W1 W1-W2 W1-W3 W1-W4 \
G-V Bp-Rp G-Rp M_G M_J M_Ks g-r i-z z-Y #SpT
G2V   5770  3.761 -0.085 0.01 4.72 1.012 4.80 0.650 0.133 0.363 0.713 1.564 0.293 0.073 0.061 -0.050 -0.040 -0.016 \
-0.165 0.823 0.459 4.635 3.60 3.236 0.476 ... ... G2V
M9V   2380  3.377 -5.86 -3.52 13.54 0.102 19.40 2.17 ... 1.890 4.66 ... 0.72 0.47 0.330 0.27 ... ... \
... 4.78: 1.60 16.20 11.59 10.40 ... 1.99 0.82 M9V
L5V   1710  3.233 -7.87 -4.20 15.23 0.0909 ... ... ... ... ... ... 1.02 0.648 0.68 0.32 ... ... \
... ... 1.71 18.50 13.46 11.87 ... 2.33 1.00 L5V
#SpT  Teff
# more comments
"""


def test_the_sequence_is_read_through_its_colours(tmp_path):
    path = tmp_path / "sequence.txt"
    path.write_text(SEQUENCE)
    rows = read_mean_sequence(path)
    assert rows.spectral_type == ("G2V", "M9V")  # cooler rows contradict themselves
    assert rows.radius_rsun[0] == pytest.approx(1.012, rel=2e-3)
    magnitude = {name: values[0] for name, values in rows.magnitude.items()}
    assert magnitude["johnson_u"] == pytest.approx(4.80 + 0.650 + 0.133)
    assert magnitude["2mass_j"] == pytest.approx(4.80 - 1.564 + 0.073 + 0.293)
    assert magnitude["wise_w2"] == pytest.approx(4.80 - 1.564 - 0.061 + 0.050)
    assert magnitude["gaia_dr2_bp"] == pytest.approx(4.80 - 0.165 - 0.459 + 0.823)
    late = {name: values[1] for name, values in rows.magnitude.items()}
    assert late["2mass_ks"] == pytest.approx(10.40)  # no V - Ks: the table's own M_Ks
    assert late["gaia_dr2_bp"] == pytest.approx(16.20 - 1.60 + 4.78)  # a colon marks a doubtful value
    assert np.isnan(late["johnson_u"])


def test_another_file_is_no_sequence(tmp_path):
    path = tmp_path / "sequence.txt"
    path.write_text("Teff logL\n5770 0.0\n")
    with pytest.raises(SettingsError, match=r"sequence\.txt: not the mean dwarf sequence"):
        read_mean_sequence(path)


def test_dwarfs_without_companions_and_their_good_bands_are_read(tmp_path):
    names = ["teff_pub", "lbol_pub", "d_pc", "Bool_delta", "Bool_RUWE"]
    for band in PASSBANDS:
        names += [f"{band}_mag", f"e{band}_mag", f"Qf_{band}"]

    def star(teff, companion, bands):
        fields = [str(teff), "0.02", "12.5", str(companion), "False"]
        for band in PASSBANDS:
            fields += bands.get(band, ["", "", "False"])
        return ",".join(fields)

    bands = {
        "B": ["12.1", "0.02", "False"],
        "V": ["10.6", "0.99", "False"],  # a placeholder
        "G": ["9.6", "0.0", "False"],  # no error known
        "J": ["7.0", "0.02", "True"],  # poor
        "Ks": ["6.1", "9.998", "False"],
    }
    path = tmp_path / "dwarfs.csv"
    rows = [star(3500.0, False, bands), star(3600.0, True, bands), star("", False, bands)]
    path.write_text("\n".join([",".join(names), *rows]) + "\n")
    dwarfs = read_dwarfs(path)
    assert dwarfs.teff_k.tolist() == [3500.0]
    assert dwarfs.radius_rsun[0] == pytest.approx(np.sqrt(0.02) * (5772.0 / 3500.0) ** 2)
    known = {name for name, value in zip(dwarfs.passbands, dwarfs.magnitude[0], strict=True) if np.isfinite(value)}
    assert known == {"johnson_b"}


# ---- the built-in set, from invented stars


def invented_tables():
    """Return a sequence and dwarfs of one radius whose departures are the same grey one in every band."""
    grey = 0.2
    teff_k = np.geomspace(2500.0, 35_000.0, 70)[::-1]
    names = (*(name for name in PASSBANDS.values() if not name.startswith(("sdss", "galex"))), "johnson_u")
    names += ("cousins_r", "cousins_i")

    def magnitudes(bands, at_k, omega):
        passbands = [load_passband(name) for name in bands]
        ln_flux = blackbody_ln_flux(passbands, at_k) + omega[:, np.newaxis] + grey
        return (ln_flux_jy(passbands, np.zeros(len(bands))) - ln_flux) / (0.4 * np.log(10.0))

    radius_rsun = np.ones(len(teff_k))
    absolute = magnitudes(names, teff_k, ln_omega(radius_rsun, 10.0))
    none = {name: np.full(len(teff_k), np.nan) for name in ("g-r", "i-z", "z-Y")}
    rows = MeanSequence(("X",) * len(teff_k), teff_k, radius_rsun, dict(zip(names, absolute.T, strict=True)), none)
    rng = np.random.default_rng(8)
    published_k = np.repeat(np.arange(2800.0, 4300.0, 100.0), 12)
    bands = tuple(PASSBANDS.values())
    apparent = magnitudes(bands, published_k, ln_omega(np.ones(len(published_k)), 10.0))
    apparent += 0.02 * rng.standard_normal(apparent.shape)
    error = np.full(apparent.shape, 0.01)
    ones = np.ones(len(published_k))
    return rows, Dwarfs(published_k, ones, 10.0 * ones, bands, apparent, error), grey


LOCUS = Locus(np.array([-5.0, 10.0]), np.array([1.0, 1.0]), np.array([0.1, 0.1]))


@pytest.fixture(scope="module")
def learnt():
    rows, dwarfs, grey = invented_tables()
    return learn_builtin(rows, dwarfs, LOCUS), grey


def test_bands_of_the_tables_get_the_departure_of_the_tables(learnt):
    departures, grey = learnt
    for name in ("johnson_b", "johnson_v", "2mass_h", "wise_w1"):
        place = departures.bands.index(name)
        assert np.max(np.abs(departures.ln_d[place] - grey)) < 0.02, name
        assert departures.range_k[place].tolist() == pytest.approx([2500.0, 35_000.0], rel=0.04)


def test_bands_between_them_are_carried_along(learnt):
    departures, grey = learnt
    ln_d = departures.ln_d[departures.bands.index("euclid_j")]
    warm = (TEFF_NODES_K > 4500.0) & (TEFF_NODES_K < 30_000.0)
    # Optical bands through relations of real stars, which these are not, lie next to it.
    np.testing.assert_allclose(ln_d[warm], grey, atol=0.15)


def test_factors_of_noise_are_small_and_the_scatter_is_the_noise(learnt):
    departures, _ = learnt
    at = departures.at(3500.0)
    place = departures.bands.index("johnson_v")
    assert departures.factors == ("photosphere",)
    assert abs(at.loading[0, place, 0]) < 0.015
    assert at.scatter[place, 0] == pytest.approx(0.4 * np.log(10.0) * 0.02, abs=0.006)


def test_warm_stars_scatter_by_one_per_cent_in_temperature(learnt):
    departures, _ = learnt
    np.testing.assert_allclose(departures.at([5500.0, 6500.0, 7500.0]).temperature_scatter, 0.01, rtol=0.02)


def test_the_ultraviolet_of_the_chromosphere_has_no_part_in_the_factors(learnt):
    departures, _ = learnt
    assert np.all(departures.loading[:, departures.bands.index("galex_nuv")] == 0.0)

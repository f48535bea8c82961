"""The start: the peak that is found against a general optimiser's, and data with two peaks."""

import numpy as np
from scipy.optimize import minimize

from simulated import make_settings, simulate
from starkiln.inference.ensemble import log_prob_function
from starkiln.inference.start import climb, find_modes, inverse_positive, solve_positive
from starkiln.physics.constants import MAS_PER_RAD
from starkiln.stages.fit import pack_block
from starkiln.stages.model import build_model

SECTIONS = {"model": {"temperature_k": [2500.0, 20000.0], "distance": {"length_scale_pc": 300.0}}}


def test_peak_is_as_high_as_a_general_optimisers():
    settings = make_settings(**SECTIONS)
    model = build_model(settings)
    stars, _ = simulate(settings, model, 40, seed=2, noise=(0.003, 0.03), shallow=0.1)
    block = pack_block(stars, model, settings)
    modes = find_modes(block, model.grid, model.prior)
    assert (modes.n_modes >= 1).all()
    for star in range(40):
        log_prob = log_prob_function(block.take(np.array([star])), model.grid, model.prior)
        found = modes.coords[star, 0]
        scale = np.sqrt(np.diag(modes.covariance[star, 0]))

        def minus(x, log_prob=log_prob, found=found, scale=scale):
            value = log_prob((found + scale * x)[None])[0]
            return -value if np.isfinite(value) else 1e12

        best = min(minimize(minus, np.full(3, s), method="Nelder-Mead").fun for s in (0.0, 0.3))
        assert -modes.log_density[star, 0] < best + 0.05


def test_climbing_from_beside_a_peak_reaches_it():
    settings = make_settings(**SECTIONS)
    model = build_model(settings)
    stars, _ = simulate(settings, model, 10, seed=3, noise=(0.002, 0.01))
    block = pack_block(stars, model, settings)
    modes = find_modes(block, model.grid, model.prior)
    coords = modes.coords[:, 0] * [1.01, 1.0, 1.0] + [0.0, 0.02, 0.02]
    climb(block, model.grid, model.prior, coords)
    log_prob = log_prob_function(block, model.grid, model.prior)
    assert (log_prob(coords) > modes.log_density[:, 0] - 0.02).all()


def test_two_peaks_are_both_found():
    # Three bands of a 3500 K star and two of a 12000 K star: the mixture can keep either set.
    settings = make_settings(bands=("sdss_u", "sdss_g", "sdss_r", "2mass_j", "2mass_h", "2mass_ks"), **SECTIONS)
    model = build_model(settings)
    stars, _ = simulate(settings, model, 1, seed=4)
    cold, hot = np.exp(model_ln_flux(model, 3500.0)), np.exp(model_ln_flux(model, 12000.0))
    stars.flux_jy[0] = 1e-18 * np.where(np.arange(6) < 3, hot * cold[2] / hot[2], cold)
    stars.error_jy[0] = 0.01 * stars.flux_jy[0]
    modes = find_modes(pack_block(stars, model, settings), model.grid, model.prior)
    assert modes.n_modes[0] >= 2


def model_ln_flux(model, teff_k):
    from starkiln.physics.bandtable import ln_flux

    return ln_flux(model.table, teff_k, 0.0)[0]


def test_small_linear_algebra():
    rng = np.random.default_rng(5)
    a = rng.normal(size=(4, 4))
    matrix, vector = a @ a.T + np.eye(4), rng.normal(size=4)
    np.testing.assert_allclose(solve_positive(matrix, vector), np.linalg.solve(matrix, vector), rtol=1e-12)
    np.testing.assert_allclose(inverse_positive(matrix), np.linalg.inv(matrix), rtol=1e-11)


def test_a_band_that_is_grossly_off_hides_no_higher_peak():
    settings = make_settings(**SECTIONS)
    model = build_model(settings)
    stars, truth = simulate(settings, model, 120, seed=12, noise=(0.002, 0.01))
    stars.flux_jy[:, 4] *= 5.0
    block = pack_block(stars, model, settings)
    modes = find_modes(block, model.grid, model.prior)
    ln_omega = 2.0 * np.log(0.5 * truth["ang_diam"] / MAS_PER_RAD)
    coords = np.stack([1e4 / truth["teff"], ln_omega + np.log(truth["teff"]), truth["av"]], axis=1)
    climb(block, model.grid, model.prior, coords)
    from_the_truth = log_prob_function(block, model.grid, model.prior)(coords)
    assert (modes.log_density[:, 0] > from_the_truth - 0.5).all()

"""The walk along a posterior: its marginal against sums over grids, and the slopes it climbs by."""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.signal import find_peaks
from scipy.special import log_ndtr
from scipy.stats import logistic, truncnorm

from simulated import invented_departures, make_settings, simulate
from starkiln.inference.ensemble import log_prob_function
from starkiln.inference.knots import _cut_at_zero, fit_proposal
from starkiln.inference.start import clamp, find_modes, make_slopes, slopes
from starkiln.physics.departures import write_departures
from starkiln.stages.fit import pack_block
from starkiln.stages.model import build_model

SECTIONS = {"temperature_k": [2500.0, 20000.0], "distance": {"length_scale_pc": 300.0}}


def log_marginal_by_grid(one, model, heat, proposal, knot):
    """Return the log of the integral of a star's density over glow and A_V at a heat; a knot says where to look."""
    location, _, scale = proposal.av[0, :, knot]
    low, high = max(location - 12.0 * scale, 0.0), min(max(location, 0.0) + 16.0 * scale, model.prior.av_max)
    step = (high - low) / 400
    av = low + step * (np.arange(400) + 0.5)
    unit = np.linspace(-9.0, 9.0, 121)
    width = proposal.factor[0, 0, 0, knot]
    ridge = proposal.centre[0, 0, knot] + proposal.slope[0, 0, knot] * (av - proposal.av[0, 1, knot])
    glow = ridge[:, None] + width * unit
    coords = np.stack([np.full(glow.shape, heat), glow, np.broadcast_to(av[:, None], glow.shape)], axis=-1)
    log_prob = log_prob_function(one, model.grid, model.prior)(coords.reshape(-1, 3))
    top = log_prob.max()
    return top + np.log(np.exp(log_prob - top).sum() * step * width * (unit[1] - unit[0]))


def marginals(one, model):
    """Return a star's proposal, its knots within exp(-8) of the peak, and by how much they are off, in the log."""
    proposal = fit_proposal(one, model.grid, model.prior, find_modes(one, model.grid, model.prior))
    log_density = proposal.log_density[0]
    inner = np.arange(1, proposal.n_knots[0] - 1)
    knots = inner[log_density[inner] > log_density[inner].max() - 8.0]
    exact = np.array([log_marginal_by_grid(one, model, proposal.heat[0, k], proposal, k) for k in knots])
    off = log_density[knots] - exact
    return proposal, knots, off - off[np.argmax(log_density[knots])]


def simulated(n, seed, dust=0.4):
    """Return well measured stars under so much dust, their model without outliers, which expects 0.4 mag."""
    settings, truth = (
        make_settings(model=SECTIONS | {"outliers": False, "extinction": {"prior": "half-normal", "scale": scale}})
        for scale in (0.4, dust)
    )
    stars, _ = simulate(truth, build_model(truth), n, seed, noise=(0.002, 0.01))
    stars.av_scale[:] = 0.4
    model = build_model(settings)
    return pack_block(stars, model, settings), model


@pytest.mark.parametrize("star", [0, 2, 3, 4, 5, 6, 7, 8])
def test_marginal_is_the_integral_over_glow_and_dust(star):
    block, model = simulated(10, seed=2)
    proposal, knots, off = marginals(block.take(np.array([star])), model)
    assert len(knots) > 7
    assert (proposal.av[0, 0, knots] > 2.0 * proposal.av[0, 2, knots]).any()
    np.testing.assert_allclose(off, 0.0, atol=0.03)


@pytest.mark.parametrize("star", [0, 1, 5, 6, 11, 12])
def test_marginal_of_a_star_without_dust_counts_what_the_cut_leaves(star):
    block, model = simulated(16, seed=5, dust=1e-3)
    proposal, knots, off = marginals(block.take(np.array([star])), model)
    location, _, scale = proposal.av[0][:, knots]
    assert (location < -2.0 * scale).any()
    assert (location > 2.0 * scale).any()
    np.testing.assert_allclose(off, 0.0, atol=0.03)


def test_marginal_of_a_faint_star_counts_how_wide_the_others_are():
    # The only one here whose scatter in glow and dust depends on temperature by as much as the tolerance.
    block, model = simulated(10, seed=2)
    _, knots, off = marginals(block.take(np.array([9])), model)
    assert len(knots) > 7
    np.testing.assert_allclose(off, 0.0, atol=0.1)


def test_marginal_of_a_star_with_two_peaks_weighs_them_rightly():
    # A band that is 30 % too faint: the mixture leaves it out, or another. Deep between the peaks, glow has two, too.
    bands = ("gaia_dr3_bp", "gaia_dr3_rp", "panstarrs_g", "2mass_j", "2mass_ks")
    settings = make_settings(bands=bands, model=SECTIONS)
    model = build_model(settings)
    stars, _ = simulate(settings, model, 40, seed=4, noise=(0.002, 0.01))
    stars.flux_jy[:, 0] *= 0.7
    proposal, knots, off = marginals(pack_block(stars, model, settings).take(np.array([8])), model)
    log_density = proposal.log_density[0, knots]
    peaks, _ = find_peaks(log_density, prominence=0.3)
    assert len(peaks) == 2
    high = log_density > log_density.max() - 4.0
    assert high[peaks].all()
    np.testing.assert_allclose(off[high], 0.0, atol=0.05)


@pytest.mark.parametrize("t", [-30.0, -6.0, -2.5, -1.0, -0.1, 0.0, 0.1, 1.0, 3.0, 7.0])
def test_cut_logistic_is_like_the_cut_normal(t):
    sigma, found = 0.3, np.empty(3)
    log_mass = _cut_at_zero(-t * sigma, sigma, found)
    location, mean, scale = found
    assert log_mass == pytest.approx(log_ndtr(-t), abs=0.011)
    # The tail's formula is good to a per cent, and a little less is left of that where the mean is a difference.
    exact = truncnorm(t, np.inf, -t * sigma, sigma)
    assert mean == pytest.approx(exact.mean(), rel=0.005 if t <= 0.0 else 0.031)
    cut = logistic(location, scale)
    end = max(location, 0.0) + 40.0 * scale
    by_parts = quad(cut.sf, 0.0, end, points=[max(location, 0.0)], limit=200)[0] / cut.sf(0.0)
    assert mean == pytest.approx(by_parts, rel=1e-6)


CASES = {
    "mixture": {},
    "gaussian errors": {"outliers": False},
    "no dust": {"extinction": {"prior": "fixed"}},
    "exponential dust": {"extinction": {"prior": "exponential", "scale": 0.4}},
    "jitter": {"jitter": True},
    "calibrated": {"photosphere": "calibrated"},
    "calibrated and jitter": {"photosphere": "calibrated", "jitter": True},
}


@pytest.mark.parametrize("name", CASES)
def test_slopes_are_those_of_the_posterior(name, tmp_path):
    choices = {**SECTIONS, **CASES[name]}
    if "calibrated" in name:
        choices["departures"] = str(tmp_path / "invented.ecsv")
        write_departures(invented_departures(n_factors=2), tmp_path / "invented.ecsv")
    settings = make_settings(model=choices)
    model = build_model(settings)
    stars, _ = simulate(settings, model, 20, seed=6, noise=(0.003, 0.02), shallow=0.1)
    block = pack_block(stars, model, settings)
    modes = find_modes(block, model.grid, model.prior)
    rng = np.random.default_rng(7)
    out = make_slopes(modes.coords.shape[2], len(model.grid.loading))
    checked = 0
    for star in range(20):
        one, covariance = block.take(np.array([star])), modes.covariance[star, 0]
        point = rng.multivariate_normal(modes.coords[star, 0], 0.5 * covariance)
        clamp(model.prior, point)
        log_prob, steps = log_prob_function(one, model.grid, model.prior), np.diag(np.sqrt(np.diag(covariance)))
        value = slopes(one, model.grid, model.prior, point, out)
        assert value == pytest.approx(log_prob(point[None])[0], rel=1e-10, abs=1e-10)
        up, down = (log_prob(point + share * steps) for share in (1e-4, -1e-4))
        if value < modes.log_density[star, 0] - 20.0:
            continue  # far above an upper limit, whose own variance is left out
        with np.errstate(invalid="ignore"):
            slope = (up - down) / 2e-4
        known = np.isfinite(slope)
        # In standard deviations. The photosphere's scatter changes with temperature, and that is left out, too.
        atol = np.full(len(slope), 0.1 if block.limit[star].any() else 0.005)
        atol[0] = 0.5 if "calibrated" in name else atol[0]
        assert (np.abs(out.gradient @ steps - slope) < atol + 1e-3 * np.abs(slope))[known].all()
        checked += known.sum()
    assert checked > 12 * len(point)

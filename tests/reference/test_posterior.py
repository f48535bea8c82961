"""Posteriors on stars drawn from the priors: against grid integration, stock emcee, copies of a star, and the truth.

The full-size versions of these checks are scripts in tests/benchmarks; here they run on fewer stars, with bounds that
a sound sampler passes but for one time in thousands.
"""

import sys
from pathlib import Path

import emcee
import numpy as np
import pytest

from simulated import make_settings, simulate

sys.path.insert(0, str(Path(__file__).parents[1] / "benchmarks"))

from copies import scatter_ratios
from grid_integration import offsets
from simulated_truth import coverage

from starkiln.inference.ensemble import Stopping, log_prob_function, sample_block
from starkiln.inference.start import find_modes
from starkiln.inference.streams import star_streams
from starkiln.stages.fit import pack_block
from starkiln.stages.model import build_model


def test_agrees_with_grid_integration():
    median, width = offsets(10, seed=3)
    assert np.sqrt((median**2).mean()) < 0.03
    assert np.abs(median).max() < 0.1
    assert np.sqrt((width**2).mean()) < 0.02
    assert np.abs(width).max() < 0.07


def test_intervals_cover_the_truth():
    tested, shares = coverage(900, seed=5)
    assert tested > 800
    for share68, share95 in shares.values():
        # Four binomial standard deviations.
        assert abs(share68 - 0.68) < 4.0 * np.sqrt(0.68 * 0.32 / tested)
        assert abs(share95 - 0.95) < 4.0 * np.sqrt(0.95 * 0.05 / tested)


@pytest.mark.slow
def test_copies_scatter_as_their_effective_size_says():
    # With 100 copies the scatter itself is known to 7 %, and there are thirty of them.
    assert scatter_ratios(100).max() < 1.45


def test_agrees_with_stock_emcee():
    settings = make_settings(model={"temperature_k": [2500.0, 20000.0], "distance": {"length_scale_pc": 300.0}})
    model = build_model(settings)
    stars, _ = simulate(settings, model, 3, seed=9, noise=(0.002, 0.01))
    block = pack_block(stars, model, settings)
    streams = star_streams(stars.ids, 1, b"photometry")
    ours = np.empty((3, 3, 5))
    for draws in sample_block(block, model.grid, model.prior, streams, 32, Stopping(4000)):
        ours[draws.stars] = np.quantile(draws.chain, [0.025, 0.16, 0.5, 0.84, 0.975], axis=-1).transpose(1, 2, 0)
    modes = find_modes(block, model.grid, model.prior)
    for star in range(3):
        stock = stock_chain(block.take(np.array([star])), model, modes, star)
        theirs = np.quantile(stock, [0.025, 0.16, 0.5, 0.84, 0.975], axis=-1).T
        sigma = 0.5 * (theirs[:, 3] - theirs[:, 1])
        # About 1,500 effective samples of theirs: 0.03 sigma on a median, 0.07 on a 97.5 % point.
        assert (np.abs(ours[star] - theirs)[:, 1:4] < 0.15 * sigma[:, None]).all()
        assert (np.abs(ours[star] - theirs) < 0.35 * sigma[:, None]).all()


def stock_chain(one, model, modes, star):
    """Return draws (3, N) of ln T, ln Omega and A_V by emcee's own moves on the same density."""
    log_prob = log_prob_function(one, model.grid, model.prior)
    rng = np.random.default_rng(star)
    start = rng.multivariate_normal(modes.coords[star, 0], modes.covariance[star, 0], 400)
    start = start[np.isfinite(log_prob(start))][:32]
    sampler = emcee.EnsembleSampler(32, 3, log_prob, moves=emcee.moves.StretchMove(), vectorize=True)
    state = emcee.State(start, random_state=np.random.RandomState(star).get_state())
    sampler.run_mcmc(state, 2800)
    heat, glow, av = sampler.get_chain(discard=400, flat=True).T
    ln_teff = np.log(1e4 / heat)
    return np.array([ln_teff, glow - ln_teff, av])

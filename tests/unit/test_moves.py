"""The block move on targets whose answer is known, star by star."""

import emcee
import numpy as np
import pytest
from scipy.stats import kstest, norm

from starkiln.inference.moves import (
    BlockMove,
    Proposal,
    add_log_independent,
    draw_independent,
    learn_proposal,
    make_scratch,
    standardise,
)
from starkiln.inference.streams import star_streams

WALKERS = 32
MEANS = np.array([[1.0, -2.0, 3.0], [0.0, 0.0, 2.5]])
COVARIANCE = np.array([[1.0, 0.8, -0.5], [0.8, 2.0, 0.1], [-0.5, 0.1, 0.6]])


def gaussian(coords):
    """Log density of a correlated Gaussian for each star, cut where the third coordinate is negative."""
    stars = np.repeat(np.arange(len(MEANS)), len(coords) // len(MEANS))
    offset = coords - MEANS[stars]
    log_prob = -0.5 * np.einsum("ni,ij,nj->n", offset, np.linalg.inv(COVARIANCE), offset)
    return np.where(coords[:, 2] < 0.0, -np.inf, log_prob)


def start(seed):
    rng = np.random.default_rng(seed)
    coords = np.concatenate([rng.multivariate_normal(mean, 0.1 * COVARIANCE, WALKERS) for mean in MEANS])
    coords[:, 2] = np.abs(coords[:, 2])
    return coords


def sample(move, steps, coords):
    sampler = emcee.EnsembleSampler(len(coords), 3, gaussian, moves=move, vectorize=True)
    chain = [state.coords.copy() for state in sampler.sample(coords, iterations=steps, store=False)]
    return np.array(chain)


def learnt(fit_av=True):
    rng = np.random.default_rng(5)
    window = np.concatenate([rng.multivariate_normal(mean, COVARIANCE, (20, WALKERS)) for mean in MEANS], axis=1)
    window[..., 2] = np.abs(window[..., 2])
    return learn_proposal(window, len(MEANS), fit_av)


@pytest.mark.parametrize(("independence", "reflect"), [(0.0, True), (1.0, True), (0.7, True), (0.7, False)])
def test_samples_a_cut_gaussian(independence, reflect):
    streams = star_streams([b"one", b"two"], 1, b"photometry")
    chain = sample(BlockMove(streams, learnt(reflect), independence), 3000, start(1))[300:]
    rng = np.random.default_rng(2)
    for star, mean in enumerate(MEANS):
        draws = chain[::5, star * WALKERS : (star + 1) * WALKERS].reshape(-1, 3)
        exact = rng.multivariate_normal(mean, COVARIANCE, 400_000)
        exact = exact[exact[:, 2] >= 0.0]
        np.testing.assert_allclose(draws.mean(axis=0), exact.mean(axis=0), atol=0.05)
        np.testing.assert_allclose(np.cov(draws.T), np.cov(exact.T), atol=0.09)
        assert kstest(draws[::40, 2], exact[:, 2]).pvalue > 1e-3


def test_a_stars_chain_does_not_depend_on_its_block():
    coords = start(3)
    together = sample(BlockMove(star_streams([b"one", b"two"], 1, b"photometry"), learnt(), 0.7), 50, coords)
    proposal = learnt().take(np.array([0]))
    sampler = emcee.EnsembleSampler(
        WALKERS,
        3,
        lambda c: gaussian(np.concatenate([c, c]))[: len(c)],
        moves=BlockMove(star_streams([b"one"], 1, b"photometry"), proposal, 0.7),
        vectorize=True,
    )
    states = sampler.sample(coords[:WALKERS], iterations=50, store=False)
    alone = np.array([state.coords.copy() for state in states])
    assert (alone == together[:, :WALKERS]).all()


def test_emcees_own_generator_changes_nothing():
    chains = []
    for seed in (1, 2):
        move = BlockMove(star_streams([b"one", b"two"], 1, b"photometry"), learnt(), 0.7)
        sampler = emcee.EnsembleSampler(2 * WALKERS, 3, gaussian, moves=move, vectorize=True)
        first = emcee.State(start(3), random_state=np.random.RandomState(seed).get_state())
        chains.append([state.coords.copy() for state in sampler.sample(first, iterations=20, store=False)])
    assert (np.array(chains[0]) == np.array(chains[1])).all()


def test_acceptance_is_counted_per_star():
    move = BlockMove(star_streams([b"one", b"two"], 1, b"photometry"), learnt(), 0.7)
    chain = sample(move, 200, start(3))
    moved = (np.diff(chain, axis=0) != 0.0).any(axis=2).reshape(199, 2, WALKERS).sum(axis=(0, 2))
    assert (np.abs(move.accepted_per_star - moved) <= WALKERS).all()
    assert (move.accepted_per_star > 0.3 * 200 * WALKERS).all()


def bent_proposal():
    factor = np.array([[[0.5, 0.0, 0.0], [0.3, 0.7, 0.0], [-0.2, 0.1, 0.4]]])
    return Proposal(np.array([2, 0, 1]), True, np.array([[0.4, 1.0, -1.0]]), factor, np.array([[0.0, 0.2, -0.1]]))


def test_density_of_the_proposal_is_the_density_of_its_draws():
    # If q is right, the mean over its draws of g/q is one constant for every normalised g; here Gaussians cut at zero.
    proposal, lanes = bent_proposal(), 400_000
    scratch = make_scratch(3, lanes)
    draws, log_q = np.empty((lanes, 3)), np.zeros(lanes)
    draw_independent(proposal, 0, star_streams([b"x"], 0, b"t")[0], scratch, draws)
    add_log_independent(proposal, 0, scratch.x, 1.0, log_q)
    assert (draws[:, 2] >= 0.0).all()
    constants = []
    for centre in ([1.0, -1.0, 0.5], [1.0, -1.0, 1.0], [0.5, -0.8, 0.2]):
        log_g = -0.5 * (((draws - centre) / 0.3) ** 2).sum(axis=1)
        constants.append(np.exp(log_g - log_q).mean() / norm.cdf(centre[2] / 0.3))
    np.testing.assert_allclose(constants, constants[0], rtol=0.03)


def test_standardising_undoes_a_draw():
    proposal = bent_proposal()
    scratch = make_scratch(3, 64)
    draws = np.empty((64, 3))
    draw_independent(proposal, 0, star_streams([b"x"], 0, b"t")[0], scratch, draws)
    x = np.empty((3, 64))
    standardise(proposal, 0, draws, x)
    np.testing.assert_allclose(x, scratch.x, rtol=1e-9, atol=1e-9)

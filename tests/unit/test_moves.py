"""The block move on targets whose answer is known, star by star."""

import emcee
import numpy as np
import pytest
from scipy.stats import kstest

from starkiln.inference.knots import normalise
from starkiln.inference.moves import BlockMove
from starkiln.inference.proposal import empty_proposal, log_proposal_density, make_scratch
from starkiln.inference.streams import star_streams

WALKERS = 32
MEANS = np.array([[1.0, -2.0, 0.6], [1.1, 0.0, 0.2]])
COVARIANCE = np.array([[0.01, 0.06, -0.03], [0.06, 1.0, 0.1], [-0.03, 0.1, 0.25]])
HEAT = np.array([0.4, 0.7, 0.9, 1.0, 1.15, 1.4, 1.8])


def gaussian(coords):
    """Log density of a correlated Gaussian for each star, cut where the third coordinate is negative."""
    stars = np.repeat(np.arange(len(MEANS)), len(coords) // len(MEANS))
    offset = coords - MEANS[stars]
    log_prob = -0.5 * np.einsum("ni,ij,nj->n", offset, np.linalg.inv(COVARIANCE), offset)
    return np.where(coords[:, 2] < 0.0, -np.inf, log_prob)


def mismatched(fit_av):
    """Return proposals that know roughly where the posteriors are, and are wrong about their widths and slopes."""
    proposal = empty_proposal(2, len(HEAT) + 2, 3, fit_av)
    n = len(HEAT)
    for star, mean in enumerate(MEANS):
        proposal.n_knots[star] = n
        proposal.heat[star, :n] = HEAT
        proposal.log_density[star, :n] = -0.5 * ((HEAT - mean[0] - 0.03) / 0.13) ** 2
        normalise(proposal.heat[star], proposal.log_density[star], proposal.mass[star], n)
        proposal.av[star, :, :n] = np.array([[0.4], [0.5], [0.35]]) + 0.1 * (HEAT - 1.0)
        places = [mean[1] + 4.0 * (HEAT - 1.0)] if fit_av else [mean[1] + 4.0 * (HEAT - 1.0), mean[2] + 0.0 * HEAT]
        proposal.centre[star, :, :n] = places
        proposal.slope[star, :, :n] = 0.8
        proposal.tangent[star, 2, :n] = 3.0
        for m, width in enumerate((1.1, 0.6)[: len(places)]):
            proposal.factor[star, m, m, :n] = width * HEAT
        proposal.learnt_mean[star] = 0.3
        proposal.learnt_factor[star] *= 0.2
    return proposal


def start(seed):
    rng = np.random.default_rng(seed)
    coords = np.concatenate([rng.multivariate_normal(mean, 0.1 * COVARIANCE, WALKERS) for mean in MEANS])
    coords[:, 2] = np.abs(coords[:, 2])
    return coords


def make_move(independence=0.7, fit_av=True):
    streams = star_streams([b"one", b"two"], 1, b"photometry")
    return BlockMove(streams, mismatched(fit_av), fit_av, np.full(2, independence), np.zeros(2, np.int64), WALKERS)


def sample(move, steps, coords, log_prob=gaussian):
    sampler = emcee.EnsembleSampler(len(coords), 3, log_prob, moves=move, vectorize=True)
    chain = [state.coords.copy() for state in sampler.sample(coords, iterations=steps, store=False)]
    return np.array(chain)


@pytest.mark.parametrize(("independence", "fit_av"), [(0.0, True), (1.0, True), (0.7, True), (0.7, False)])
def test_samples_a_cut_gaussian(independence, fit_av):
    chain = sample(make_move(independence, fit_av), 3000, start(1))[300:]
    rng = np.random.default_rng(2)
    scale = np.sqrt(np.diag(COVARIANCE))
    for star, mean in enumerate(MEANS):
        draws = chain[::5, star * WALKERS : (star + 1) * WALKERS].reshape(-1, 3) / scale
        exact = rng.multivariate_normal(mean, COVARIANCE, 400_000)
        exact = exact[exact[:, 2] >= 0.0] / scale
        np.testing.assert_allclose(draws.mean(axis=0), exact.mean(axis=0), atol=0.04)
        np.testing.assert_allclose(np.cov(draws.T), np.cov(exact.T), atol=0.05)
        for k in range(3):
            assert kstest(draws[::40, k], exact[:, k]).pvalue > 1e-3


def test_a_stars_chain_does_not_depend_on_its_block():
    coords = start(3)
    together = sample(make_move(), 50, coords)
    for star in range(2):
        streams = star_streams([b"one", b"two"], 1, b"photometry")[star : star + 1]
        proposal = mismatched(True).take(np.array([star]))
        move = BlockMove(streams, proposal, True, np.full(1, 0.7), np.zeros(1, np.int64), WALKERS)
        mine = slice(star * WALKERS, (star + 1) * WALKERS)

        def log_prob(c, star=star):
            return gaussian(np.concatenate([c, c])).reshape(2, -1)[star]

        assert (sample(move, 50, coords[mine], log_prob) == together[:, mine]).all()


def test_emcees_own_generator_changes_nothing():
    chains = []
    for seed in (1, 2):
        first = emcee.State(start(3), random_state=np.random.RandomState(seed).get_state())
        sampler = emcee.EnsembleSampler(2 * WALKERS, 3, gaussian, moves=make_move(), vectorize=True)
        chains.append([state.coords.copy() for state in sampler.sample(first, iterations=20, store=False)])
    assert (np.array(chains[0]) == np.array(chains[1])).all()


def test_acceptance_is_counted_per_star():
    move, first = make_move(), start(3)
    chain = sample(move, 200, first)
    moved = (np.diff(chain, axis=0, prepend=first[None]) != 0.0).any(axis=2)
    assert (move.accepted == moved.reshape(200, 2, WALKERS).sum(axis=(0, 2))).all()
    assert (move.accepted > 0.2 * 200 * WALKERS).all()


@pytest.mark.parametrize("fit_av", [False, True])
def test_kept_densities_are_those_of_where_the_walkers_are(fit_av):
    move = make_move(0.8, fit_av)
    sampler = emcee.EnsembleSampler(2 * WALKERS, 3, gaussian, moves=move, vectorize=True)
    known = 0
    for state in sampler.sample(start(3), iterations=60, store=False):
        for star in range(2):
            mine = slice(star * WALKERS, (star + 1) * WALKERS)
            again = np.empty(WALKERS)
            scratch = make_scratch(len(move.proposal.centre[star]), WALKERS)
            log_proposal_density(move.proposal, star, fit_av, state.coords[mine], scratch, again)
            kept = ~np.isnan(move.log_proposal[mine])
            np.testing.assert_allclose(move.log_proposal[mine][kept], again[kept], rtol=0.0, atol=1e-9)
            known += kept.sum()
    # Differential evolution leaves what it moved unknown; what it did not is kept.
    assert 0.8 * 120 * WALKERS < known < 120 * WALKERS

"""The independence proposal: its density, its draws, and what the burn-in teaches it."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import halfnorm, kstest, logistic, norm

from simulated import invented_departures, make_settings, simulate
from starkiln.inference.knots import fit_proposal, normalise
from starkiln.inference.proposal import (
    draw_independent,
    empty_proposal,
    find_last_at_most,
    learn_others,
    log_density_there,
    log_normalisation,
    log_proposal_density,
    make_scratch,
)
from starkiln.inference.start import find_modes
from starkiln.inference.streams import star_streams
from starkiln.physics.departures import write_departures
from starkiln.stages.fit import pack_block
from starkiln.stages.model import build_model

OTHERS = 3


def bent_proposal(fit_av, learnt):
    """Return the proposal of two stars of 5 and 8 knots, whose ridges are bent and whose scatter changes on the way."""
    rng = np.random.default_rng(1)
    proposal = empty_proposal(2, 8, 1 + fit_av + OTHERS, fit_av)
    for star, n in enumerate((5, 8)):
        proposal.n_knots[star] = n
        proposal.heat[star, :n] = np.concatenate([[0.5], 0.5 + np.cumsum(rng.dirichlet(np.full(n - 1, 9.0)))])
        proposal.log_density[star, :n] = -2.0 * rng.random(n)
        normalise(proposal.heat[star], proposal.log_density[star], proposal.mass[star], n)
        proposal.av[star, :, :n] = rng.uniform([[-0.4], [0.3], [0.2]], [[0.6], [0.6], [0.3]], (3, n))
        proposal.centre[star, :, :n] = rng.normal(0.0, 0.1, (OTHERS, n))
        proposal.slope[star, :, :n] = rng.normal(0.0, 0.2, (OTHERS, n))
        proposal.tangent[star, :, :n] = rng.normal(0.0, 0.5, (2 + OTHERS, n))
        for k in range(n):
            proposal.factor[star, :, :, k] = lower_factor(rng, 0.3)
    if learnt:
        proposal.learnt_mean[:] = rng.normal(0.0, 0.3, (2, OTHERS))
        proposal.learnt_factor[:] = [lower_factor(rng, 1.0), lower_factor(rng, 1.0)]
    return proposal


def lower_factor(rng, size):
    return size * (np.tril(rng.uniform(-0.5, 0.5, (OTHERS, OTHERS)), -1) + np.diag(rng.uniform(0.8, 1.2, OTHERS)))


def draw(proposal, star, fit_av, lanes):
    """Return draws (lanes, ndim), their log density, normalised, and where they are."""
    n_others = proposal.centre.shape[1]
    scratch = make_scratch(n_others, lanes)
    draws, log_q = np.empty((lanes, 1 + fit_av + n_others)), np.empty(lanes)
    draw_independent(proposal, star, fit_av, star_streams([b"x"], 0, b"t")[0], scratch, draws)
    log_density_there(proposal, star, fit_av, draws, scratch, log_q)
    return draws, log_q + log_normalisation(n_others), scratch


@pytest.mark.parametrize("learnt", [False, True])
@pytest.mark.parametrize("fit_av", [False, True])
def test_density_integrates_to_one_and_is_that_of_the_draws(fit_av, learnt):
    # If q is right, the mean over its draws of g/q is one for every normalised g.
    proposal = bent_proposal(fit_av, learnt)
    others = [1, 3, 4] if fit_av else [1, 2, 3]
    for star in range(2):
        draws, log_q, _ = draw(proposal, star, fit_av, 300_000)
        middle = np.median(draws, axis=0)
        for heat, offset in ((0.8, 0.0), (1.0, 0.1), (1.2, -0.1)):
            log_g = norm.logpdf(draws[:, 0], heat, 0.07)
            log_g += norm.logpdf(draws[:, others], middle[others] + offset, 0.3).sum(axis=1)
            if fit_av:
                log_g += halfnorm.logpdf(draws[:, 2], 0.0, 0.5)
            share = np.exp(log_g - log_q)
            assert share.std() < 5.5
            assert share.mean() == pytest.approx(1.0, abs=0.03)


def test_heat_follows_its_marginal_and_dust_the_cut_logistic():
    proposal = bent_proposal(True, True)
    for star, n in enumerate(proposal.n_knots):
        draws, _, scratch = draw(proposal, star, True, 20_000)
        heat = np.linspace(proposal.heat[star, 0], proposal.heat[star, n - 1], 100_001)
        density = np.exp(np.interp(heat, proposal.heat[star, :n], proposal.log_density[star, :n]))
        mass = np.concatenate([[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]) * np.diff(heat))])
        assert mass[-1] == pytest.approx(1.0, abs=1e-6)
        assert kstest(draws[:, 0], lambda x, heat=heat, mass=mass: np.interp(x, heat, mass)).pvalue > 1e-3
        cut = logistic(scratch.location, scratch.scale)
        assert (draws[:, 2] >= 0.0).all()
        assert kstest(1.0 - cut.sf(draws[:, 2]) / cut.sf(0.0), "uniform").pvalue > 1e-3


@pytest.mark.parametrize("fit_av", [False, True])
def test_density_at_given_positions_is_that_of_the_draws(fit_av):
    proposal = bent_proposal(fit_av, True)
    for star in range(2):
        draws, log_q, scratch = draw(proposal, star, fit_av, 2000)
        x, again = scratch.x.copy(), np.empty(2000)
        log_proposal_density(proposal, star, fit_av, draws, make_scratch(OTHERS, 2000), again)
        np.testing.assert_allclose(again + log_normalisation(OTHERS), log_q, rtol=0.0, atol=1e-9)
        log_proposal_density(proposal, star, fit_av, draws, scratch, again)
        np.testing.assert_allclose(scratch.x, x, atol=1e-9)


@pytest.mark.parametrize("fit_av", [False, True])
def test_the_burn_in_teaches_mean_and_covariance(fit_av):
    proposal = bent_proposal(fit_av, True)
    steps, walkers = 12, 50
    window, standard = [], []
    for star in range(2):
        draws, _, scratch = draw(proposal, star, fit_av, steps * walkers)
        window.append(draws.reshape(steps, walkers, -1))
        standard.append(scratch.x)
    learn_others(np.concatenate(window, axis=1), fit_av, proposal)
    for star, x in enumerate(standard):
        np.testing.assert_allclose(proposal.learnt_mean[star], x.mean(axis=1), atol=1e-9)
        lower = proposal.learnt_factor[star]
        assert (np.triu(lower, 1) == 0.0).all()
        np.testing.assert_allclose(lower @ lower.T, np.cov(x, bias=True) + 1e-6 * np.eye(OTHERS), atol=1e-9)


def test_taking_stars_takes_all_that_is_theirs():
    proposal = bent_proposal(True, True)
    taken = proposal.take(np.array([1]))
    assert len(taken.n_knots) == 1
    for one, two in zip(draw(taken, 0, True, 100)[:2], draw(proposal, 1, True, 100)[:2], strict=True):
        assert (one == two).all()


numbers = st.floats(-1e3, 1e3)


@given(st.lists(numbers, min_size=2, max_size=66, unique=True), st.lists(numbers, min_size=1, max_size=9), st.data())
def test_the_knot_below_is_that_of_a_binary_search(values, wanted, data):
    values = np.sort(values)
    n = data.draw(st.integers(2, len(values)))
    wanted = np.array(wanted + data.draw(st.lists(st.sampled_from(list(values)), max_size=9)))
    found = np.empty(len(wanted), np.uint64)
    find_last_at_most(values, n, wanted, found)
    expected = np.searchsorted(values[: n - 1], wanted, side="right") - 1
    assert found.tolist() == np.maximum(expected, 0).tolist()


@pytest.fixture(scope="module", params=["half-normal", "fixed"])
def fitted(request, tmp_path_factory):
    """Return the prior and the proposals of stars of which some are hotter, or colder, than the bounds allow."""
    departures = tmp_path_factory.mktemp("departures") / "invented.ecsv"
    write_departures(invented_departures(n_factors=2), departures)
    choices = {
        "photosphere": "calibrated",
        "departures": str(departures),
        "distance": {"length_scale_pc": 300.0},
        "extinction": {"prior": request.param},
    }
    wide, narrow = (
        make_settings(model=choices | {"temperature_k": bounds}) for bounds in ([2500.0, 20000.0], [4000.0, 9000.0])
    )
    stars, truth = simulate(wide, build_model(wide), 24, seed=3, noise=(0.003, 0.02))
    assert (truth["teff"] < 4000.0).any()
    assert (truth["teff"] > 9000.0).any()
    model = build_model(narrow)
    block = pack_block(stars, model, narrow)
    return model.prior, fit_proposal(block, model.grid, model.prior, find_modes(block, model.grid, model.prior))


def test_proposals_of_stars_keep_to_the_bounds_and_know_their_density(fitted):
    prior, proposal = fitted
    low, high = 1e4 / np.exp(prior.ln_teff_max), 1e4 / np.exp(prior.ln_teff_min)
    at_bound = np.zeros(2)
    for star, n in enumerate(proposal.n_knots):
        heat, mass = proposal.heat[star, :n], proposal.mass[star, :n]
        assert (np.diff(heat) > 0.0).all()
        assert (np.diff(mass) >= 0.0).all()
        assert (mass[0], mass[-1]) == (0.0, 1.0)
        draws, log_q, _ = draw(proposal, star, prior.fit_av, 500)
        assert np.isfinite(draws).all()
        assert (draws[:, 0] >= low * (1.0 - 2e-6)).all()
        assert (draws[:, 0] <= high * (1.0 + 2e-6)).all()
        if prior.fit_av:
            assert (draws[:, 2] >= 0.0).all()
        again, n_others = np.empty(500), proposal.centre.shape[1]
        log_proposal_density(proposal, star, prior.fit_av, draws, make_scratch(n_others, 500), again)
        np.testing.assert_allclose(again + log_normalisation(n_others), log_q, rtol=0.0, atol=1e-6)
        at_bound += heat[1] < low * (1.0 + 1e-6), heat[-2] > high * (1.0 - 1e-6)
    assert (at_bound > 0).all()

"""Effective sizes and R-hat against arviz, autocorrelation against emcee, on chains good and bad."""

import warnings

import emcee
import numpy as np
import pytest

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import arviz

from starkiln.inference.convergence import autocorrelation_times, diagnose


def ar1(rng, steps, walkers, a):
    noise = rng.normal(size=(steps, walkers))
    chain = np.empty((steps, walkers))
    chain[0] = noise[0] / np.sqrt(1.0 - a * a)
    for t in range(1, steps):
        chain[t] = a * chain[t - 1] + noise[t]
    return chain


def sticky(chain, rng, share):
    """Repeat a share of the steps, as refused proposals do, so that values tie."""
    chain = chain.copy()
    for t in range(1, len(chain)):
        stay = rng.random(chain.shape[1]) < share
        chain[t, stay] = chain[t - 1, stay]
    return chain


def chains(rng):
    yield "independent", rng.normal(size=(96, 32))
    yield "AR(0.9)", ar1(rng, 600, 16, 0.9)
    yield "anticorrelated", ar1(rng, 200, 16, -0.3)
    yield "AR(0.99), long", ar1(rng, 2000, 32, 0.99)
    yield "skewed, sticky", sticky(np.exp(rng.normal(size=(128, 32))), rng, 0.5)
    yield "one walker apart", ar1(rng, 128, 16, 0.3) + 9.0 * (np.arange(16) == 3)
    yield "wider in half", rng.normal(size=(128, 16)) * np.where(np.arange(16) < 8, 1.0, 4.0)


CHAINS = dict(chains(np.random.default_rng(17)))


def run_diagnose(draws):
    chain = np.ascontiguousarray(draws)[None, None]
    order = np.argsort(chain.reshape(1, 1, -1), axis=-1)
    return diagnose(chain, order, autocorrelation_times(chain))


@pytest.mark.parametrize("name", CHAINS)
def test_agrees_with_arviz(name):
    draws = CHAINS[name]
    found = run_diagnose(draws)
    assert found.ess_bulk[0, 0] == pytest.approx(float(arviz.ess(draws.T, method="bulk")), rel=1e-6)
    assert found.ess_tail[0, 0] == pytest.approx(float(arviz.ess(draws.T, method="tail")), rel=1e-6)
    assert found.rhat[0, 0] == pytest.approx(float(arviz.rhat(draws.T, method="rank")), rel=1e-6)


@pytest.mark.parametrize("name", CHAINS)
def test_autocorrelation_agrees_with_emcee(name):
    draws = CHAINS[name]
    tau = emcee.autocorr.integrated_time(draws[:, :, None], quiet=True, tol=0)[0]
    assert autocorrelation_times(draws[None, None])[0, 0] == pytest.approx(tau, rel=1e-6)


def test_autocorrelation_of_a_known_process():
    # An AR(1) process with a = 0.9 has tau = (1 + a) / (1 - a) = 19.
    draws = ar1(np.random.default_rng(1), 20_000, 16, 0.9)
    assert autocorrelation_times(draws[None, None])[0, 0] == pytest.approx(19.0, rel=0.05)


def test_stray_walker_is_seen():
    assert run_diagnose(CHAINS["one walker apart"]).stray_walker[0]
    assert not run_diagnose(CHAINS["independent"]).stray_walker[0]


def test_chain_that_never_moves_is_nan_not_good():
    found = run_diagnose(np.ones((64, 8)))
    assert np.isnan(found.ess_bulk[0, 0])
    assert np.isnan(found.ess_tail[0, 0])
    assert np.isnan(found.autocorr_steps[0, 0])


def test_ties_share_their_rank():
    # Ties among the draws, and among their distances from the median.
    draws = np.random.default_rng(3).integers(0, 4, size=(64, 8)).astype(float)
    found = run_diagnose(draws)
    assert found.ess_bulk[0, 0] == pytest.approx(float(arviz.ess(draws.T, method="bulk")), rel=1e-6)
    assert found.rhat[0, 0] == pytest.approx(float(arviz.rhat(draws.T, method="rank")), rel=1e-6)

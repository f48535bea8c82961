"""The kernel of the log-posterior against the same posterior written plainly."""

import numpy as np
import pytest

from plain_posterior import log_posterior as plain_log_posterior
from plain_posterior import on_grid
from simulated import invented_departures, make_settings, simulate
from starkiln.inference.ensemble import log_prob_function
from starkiln.inference.posterior import n_parameters
from starkiln.physics.departures import write_departures
from starkiln.stages.fit import pack_block
from starkiln.stages.model import build_model

CASES = {
    "mixture": {},
    "gaussian errors": {"outliers": False},
    "no dust": {"extinction": {"prior": "fixed"}},
    "exponential dust": {"extinction": {"prior": "exponential", "scale": 0.4}},
    "known dust": {"extinction": {"prior": "gaussian", "mean": "av", "scale": "av_error"}},
    "jitter": {"jitter": True},
    "calibrated": {"photosphere": "calibrated"},
    "calibrated, two factors, no dust": {"photosphere": "calibrated", "extinction": {"prior": "fixed", "mean": 0.7}},
    "calibrated and jitter": {"photosphere": "calibrated", "jitter": True},
}


@pytest.fixture(scope="module", params=CASES)
def case(request, tmp_path_factory):
    choices = {"distance": {"length_scale_pc": 300.0}, **CASES[request.param]}
    if "calibrated" in request.param:
        choices["departures"] = str(tmp_path_factory.mktemp("departures") / "invented.ecsv")
        departures = invented_departures(n_factors=2 if "two" in request.param else 1)
        write_departures(departures, choices["departures"])
    settings = make_settings(model=choices)
    model = build_model(settings)
    stars, _ = simulate(settings, model, 40, seed=1, shallow=0.2)
    usable = np.random.default_rng(2).random(stars.usable.shape) < 0.8
    stars.usable[:] = usable
    stars.limit[:] &= usable
    return settings, model, stars


def block_of(stars, model, settings):
    """Return the block of the stars, every other one with the wider factors of a giant."""
    block = pack_block(stars, model, settings)
    return block._replace(factor_scale=np.where(np.arange(len(stars)) % 2, 1.7, 1.0))


def points_near(rng, model, n):
    """Return random (ln T, ln Omega, A_V), factors (K, n) and ln jitter, some of them outside the bounds."""
    return (
        rng.uniform(np.log(1400.0), np.log(65_000.0), n),
        rng.uniform(-60.0, -40.0, n),
        rng.uniform(-0.2, 6.5, n),
        rng.normal(size=(len(model.grid.loading), n)),
        rng.uniform(-7.0, 0.1, n),
    )


def test_kernel_agrees_with_plain_posterior(case):
    settings, model, stars = case
    rng = np.random.default_rng(3)
    block = block_of(stars, model, settings)
    for star in range(len(stars)):
        ln_teff, ln_omega, av, z, ln_jitter = points_near(rng, model, 48)
        if not model.prior.fit_av:
            av = np.full_like(av, stars.av_mean[star])
        scale, own = block.factor_scale[star], ln_jitter if model.prior.fit_jitter else None
        plain = ln_teff + plain_log_posterior(
            ln_teff, ln_omega, av, stars, star, model, settings, z, own, factor_scale=scale
        )
        coords = [1e4 / np.exp(ln_teff), ln_omega + ln_teff]
        coords += ([av] if model.prior.fit_av else []) + list(z) + ([ln_jitter] if model.prior.fit_jitter else [])
        log_prob = log_prob_function(block.take(np.array([star])), model.grid, model.prior)(np.stack(coords, axis=1))
        inside = np.isfinite(plain)
        assert inside.any()
        assert (np.isfinite(log_prob) == inside).all()
        # The two differ by the constants of the priors of A_V and z alone.
        offset = log_prob[inside] - plain[inside]
        np.testing.assert_allclose(offset, offset[0], rtol=1e-9, atol=1e-7 * np.abs(plain[inside]).max())


def test_a_star_has_the_same_density_in_any_block(case):
    settings, model, stars = case
    block = block_of(stars, model, settings)
    rng = np.random.default_rng(4)
    ndim = n_parameters(model.grid, model.prior)
    coords = np.concatenate(
        [rng.uniform(0.3, 5.0, (40, 8, 1)), rng.uniform(-50.0, -35.0, (40, 8, 1)), rng.uniform(-4, 4, (40, 8, ndim))],
        axis=-1,
    )
    coords = np.ascontiguousarray(coords[..., :ndim])
    together = log_prob_function(block, model.grid, model.prior)(coords.reshape(-1, ndim)).reshape(40, 8)
    assert np.isfinite(together).any()
    for star in range(40):
        alone = log_prob_function(block.take(np.array([star])), model.grid, model.prior)
        assert (alone(coords[star]) == together[star]).all()
        assert alone(coords[star, :1])[0] == together[star, 0]


def test_factors_on_the_grid_are_those_of_the_departures(tmp_path):
    departures = invented_departures()
    write_departures(departures, tmp_path / "invented.ecsv")
    choices = {"photosphere": "calibrated", "departures": str(tmp_path / "invented.ecsv")}
    model = build_model(make_settings(model=choices))
    ln_teff = np.random.default_rng(6).uniform(np.log(1500.0), np.log(60_000.0), 200)
    at = departures.at(np.exp(ln_teff))
    # The file has five decimals.
    np.testing.assert_allclose(on_grid(model.grid.loading[0], model, ln_teff), at.loading[0], atol=2e-5)
    np.testing.assert_allclose(on_grid(model.grid.scatter, model, ln_teff), at.scatter, atol=2e-5)


def test_density_is_finite_at_absurd_brightness(case):
    settings, model, stars = case
    block = pack_block(stars, model, settings).take(np.array([0]))
    coords = np.full((1, n_parameters(model.grid, model.prior)), -0.5)
    coords[0, :2] = 1e4 / 59_000.0, model.prior.ln_omega_max + 10.9
    if model.prior.fit_av:
        coords[0, 2] = 0.0
    assert np.isfinite(log_prob_function(block, model.grid, model.prior)(coords)).all()

"""The kernel of the log-posterior against the same posterior written plainly."""

import numpy as np
import pytest

from plain_posterior import log_posterior as plain_log_posterior
from simulated import make_settings, simulate
from starkiln.inference.ensemble import log_prob_function
from starkiln.stages.fit import pack_block
from starkiln.stages.model import build_model

CASES = {
    "mixture": {},
    "gaussian errors": {"outliers": False},
    "no dust": {"extinction": {"prior": "fixed"}},
}


@pytest.fixture(scope="module", params=CASES)
def case(request):
    settings = make_settings(model={"distance": {"length_scale_pc": 300.0}, **CASES[request.param]})
    model = build_model(settings)
    stars, _ = simulate(settings, model, 40, seed=1, shallow=0.2)
    usable = np.random.default_rng(2).random(stars.usable.shape) < 0.8
    stars.usable[:] = usable
    stars.limit[:] &= usable
    return settings, model, stars


def points_near(rng, stars, star, n):
    """Return random (ln T, ln Omega, A_V), some of them outside the bounds."""
    return (
        rng.uniform(np.log(1400.0), np.log(65_000.0), n),
        rng.uniform(-60.0, -40.0, n),
        rng.uniform(-0.2, 6.5, n),
    )


def test_kernel_agrees_with_plain_posterior(case):
    settings, model, stars = case
    rng = np.random.default_rng(3)
    block = pack_block(stars, model, settings)
    for star in range(len(stars)):
        ln_teff, ln_omega, av = points_near(rng, stars, star, 48)
        if not model.prior.fit_av:
            av = np.zeros_like(av)
        plain = plain_log_posterior(ln_teff, ln_omega, av, stars, star, model, settings) + ln_teff
        coords = np.stack([1e4 / np.exp(ln_teff), ln_omega + ln_teff, av], axis=1)
        coords = np.ascontiguousarray(coords[:, : 3 if model.prior.fit_av else 2])
        log_prob = log_prob_function(block.take(np.array([star])), model.grid, model.prior)(coords)
        inside = np.isfinite(plain)
        assert (np.isfinite(log_prob) == inside).all()
        # The two differ by the constant of the A_V prior alone.
        offset = log_prob[inside] - plain[inside]
        np.testing.assert_allclose(offset, offset[0], rtol=1e-9, atol=1e-7 * np.abs(plain[inside]).max())


def test_a_star_has_the_same_density_in_any_block(case):
    settings, model, stars = case
    block = pack_block(stars, model, settings)
    rng = np.random.default_rng(4)
    ndim = 3 if model.prior.fit_av else 2
    coords = np.stack(
        [rng.uniform(0.3, 5.0, (40, 8)), rng.uniform(-50.0, -35.0, (40, 8)), rng.uniform(0, 6, (40, 8))], -1
    )
    coords = np.ascontiguousarray(coords[..., :ndim])
    together = log_prob_function(block, model.grid, model.prior)(coords.reshape(-1, ndim)).reshape(40, 8)
    for star in range(40):
        alone = log_prob_function(block.take(np.array([star])), model.grid, model.prior)
        assert (alone(coords[star]) == together[star]).all()
        assert alone(coords[star, :1])[0] == together[star, 0]


def test_density_is_finite_at_absurd_brightness(case):
    settings, model, stars = case
    block = pack_block(stars, model, settings).take(np.array([0]))
    coords = np.array([[1e4 / 59_000.0, model.prior.ln_omega_max + 10.9, 0.0]])[:, : 3 if model.prior.fit_av else 2]
    assert np.isfinite(log_prob_function(block, model.grid, model.prior)(np.ascontiguousarray(coords))).all()

"""Distances: the published mode, exact draws, and the bounds on R against brute force."""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import kstest, norm

from distance_posterior import log_density, mode_pc
from starkiln.inference.distances import GAUSSIAN, NONE, PARALLAX, DistanceData, draw_distances
from starkiln.inference.streams import star_streams

BOUNDS_PC = (0.1, 2e5)
ANY_RADIUS = (-1000.0, 1000.0)
CASES = [
    (10.0, 0.1, 1350.0),
    (1.0, 0.3, 1350.0),
    (0.2, 0.5, 300.0),
    (-0.4, 0.3, 1350.0),
    (-3.0, 1.0, 100.0),
    (740.0, 0.05, 500.0),
]


def draw(kind, value, error, length, ln_omega, ln_radius=ANY_RADIUS):
    data = DistanceData(np.array([kind]), np.array([value]), np.array([error]), np.array([length]))
    return draw_distances(ln_omega[None], data, BOUNDS_PC, ln_radius, star_streams([b"star"], 3, b"distance"))


@pytest.mark.parametrize(("parallax", "error", "length"), CASES)
def test_mode_is_the_peak_of_the_density(parallax, error, length):
    mode = mode_pc(parallax, error, length)
    around = mode * np.array([0.999, 1.0, 1.001])
    density = log_density(around, parallax, error, length)
    assert density[1] > density[0]
    assert density[1] > density[2]


@pytest.mark.parametrize(("parallax", "error", "length"), CASES)
def test_draws_follow_the_density(parallax, error, length):
    n = 20_000
    draws = np.exp(draw(PARALLAX, parallax, error, length, np.zeros(n)).ln_dist_pc[0])
    grid = np.exp(np.linspace(np.log(BOUNDS_PC[0]), np.log(BOUNDS_PC[1]), 2_000_001))
    density = log_density(grid, parallax, error, length) + np.log(grid)
    weight = np.exp(density - density.max())
    mass = np.cumsum(weight) - 0.5 * weight
    assert kstest(draws, lambda d: np.interp(d, grid, mass / weight.sum())).pvalue > 1e-3


def test_a_precise_parallax_gives_its_inverse():
    draws = np.exp(draw(PARALLAX, 100.0, 0.01, 1350.0, np.zeros(20_000)).ln_dist_pc[0])
    assert np.median(draws) == pytest.approx(10.0, rel=1e-5)
    assert draws.std() == pytest.approx(0.001, rel=0.03)


def test_a_given_distance_is_its_gaussian():
    draws = np.exp(draw(GAUSSIAN, 250.0, 10.0, 1350.0, np.zeros(20_000)).ln_dist_pc[0])
    assert kstest(draws, "norm", args=(250.0, 10.0)).pvalue > 1e-3


def test_without_a_parallax_there_is_no_distance():
    drawn = draw(NONE, np.nan, np.nan, 1350.0, np.zeros(100))
    assert np.isnan(drawn.ln_dist_pc).all()
    assert (drawn.source[0] == np.arange(100)).all()


def test_bounds_on_the_radius_tie_distance_and_angular_size():
    # ln Omega ~ N(0, 1) about R = 1 at 500 pc; R is held between 0.8 and 1.25. Brute force integrates the product.
    rng = np.random.default_rng(8)
    n, mean = 200_000, -2.0 * np.log(500.0)
    ln_omega = mean + rng.normal(size=n)
    ln_radius = (np.log(0.8), np.log(1.25))
    drawn = draw(PARALLAX, 1.5, 0.5, 1350.0, ln_omega, ln_radius)
    ln_dist = drawn.ln_dist_pc[0]
    ln_r = ln_dist + 0.5 * ln_omega[drawn.source[0]]
    assert ln_r.min() >= ln_radius[0] - 1e-6
    assert ln_r.max() <= ln_radius[1] + 1e-6
    assert 0.1 < drawn.kept_share[0] < 0.95

    def weight(s):
        # The chance of ln Omega between the bounds at this distance.
        low, high = 2.0 * (ln_radius[0] - s), 2.0 * (ln_radius[1] - s)
        return (norm.cdf(high, mean) - norm.cdf(low, mean)) * np.exp(log_density(np.exp(s), 1.5, 0.5, 1350.0) + s)

    total = quad(weight, 3.0, 9.5, limit=200)[0]
    for s in np.quantile(ln_dist, [0.1, 0.5, 0.9]):
        assert quad(weight, 3.0, s, limit=200)[0] / total == pytest.approx((ln_dist < s).mean(), abs=0.006)


def test_parallax_against_the_bounds_leaves_draws_at_the_bound():
    ln_omega = np.full(100, 2.0 * np.log(1e-9))
    drawn = draw(PARALLAX, 100.0, 0.01, 1350.0, ln_omega, (np.log(1.0), np.log(2.0)))
    assert drawn.kept_share[0] == 0.0
    np.testing.assert_allclose(drawn.ln_dist_pc[0] + 0.5 * ln_omega, 0.0, atol=1e-9)


def test_a_sharp_parallax_far_beyond_the_length_scale_is_followed():
    # The likelihood's peak lies between two nodes of the coarse grid, where the prior has long died out.
    draws = np.exp(draw(PARALLAX, 0.0101, 1e-8, 10.0, np.zeros(2000)).ln_dist_pc[0])
    assert np.median(draws) == pytest.approx(1e3 / 0.0101, rel=1e-3)
    assert draws.std() < 1.0

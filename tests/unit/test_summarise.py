"""The predictive chance of a chi squared, against simulation of the likelihood; what counts as an excess."""

import numpy as np
import pytest
from scipy.stats import chi2 as chi2_distribution

from starkiln.inference.posterior import Prior
from starkiln.stages.summarise import excess, predictive_chance


def prior(fraction):
    return Prior(0.0, 1.0, 0.0, 1.0, 6.0, True, fraction, 10.0, False, -7.0)


@pytest.mark.parametrize("n", [3, 8, 15])
def test_without_outliers_it_is_the_chi_square_distribution(n):
    values = np.array([[0.5, 5.0, 20.0, 60.0]])
    found = predictive_chance(values, np.array([n]), prior(0.0))
    np.testing.assert_allclose(found, chi2_distribution.sf(values, n), rtol=1e-12)


@pytest.mark.parametrize("n", [3, 8, 15])
def test_with_outliers_it_is_what_simulation_gives(n):
    rng = np.random.default_rng(n)
    width = np.where(rng.random((400_000, n)) < 0.02, 10.0, 1.0)
    simulated = ((width * rng.normal(size=(400_000, n))) ** 2).sum(axis=1)
    values = np.array([[2.0, 10.0, 30.0, 100.0, 400.0, 1000.0]])
    expected = [(simulated >= value).mean() for value in values[0]]
    found = predictive_chance(values, np.array([n]), prior(0.02))[0]
    np.testing.assert_allclose(found, expected, rtol=0.1, atol=0.012)
    np.testing.assert_allclose(found[3:], expected[3:], rtol=0.12, atol=3e-4)


@pytest.mark.parametrize(
    ("residual", "limit", "expected"),
    [
        ([0.5, 3.5], [False, False], True),
        ([3.5, 0.5], [False, False], True),
        ([2.9, 2.9], [False, False], False),
        ([3.5, -1.5], [False, False], False),
        ([-1.5, 3.5], [False, False], True),  # the fit gives way to the band beyond
        ([3.5, -1.5], [False, True], False),
        ([0.5, 50.0], [False, True], False),  # a limit far above the model says nothing
        ([3.5, 50.0], [False, True], True),
        ([np.nan, 3.5], [False, False], True),
        ([3.5, np.nan], [False, False], True),
        ([np.nan, np.nan], [False, False], False),
    ],
)
def test_an_excess_is_measured_and_not_contradicted_further_out(residual, limit, expected):
    assert excess(np.array([residual]), np.array([limit])).tolist() == [expected]

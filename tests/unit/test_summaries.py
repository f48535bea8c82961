"""Quantiles, correlations and gaps of draws."""

import numpy as np

from starkiln.inference.summaries import PROBABILITIES, correlations, has_gap, means, quantiles


def test_quantiles_are_numpys():
    draws = np.random.default_rng(1).normal(size=(5, 1001))
    np.testing.assert_allclose(quantiles(draws), np.quantile(draws, PROBABILITIES, axis=1).T, rtol=1e-13)


def test_correlations_are_numpys_and_nan_where_nothing_varies():
    rng = np.random.default_rng(2)
    a, b = rng.normal(size=(2, 3, 500))
    b += a
    b[2] = 4.0
    found = correlations(a, b)
    np.testing.assert_allclose(found[:2], [np.corrcoef(a[k], b[k])[0, 1] for k in range(2)], rtol=1e-12)
    assert np.isnan(found[2])
    np.testing.assert_allclose(means(a), a.mean(axis=1), rtol=1e-12)


def test_gap_between_two_peaks_is_seen_and_one_peak_has_none():
    rng = np.random.default_rng(3)
    one = rng.normal(size=(200, 2000))
    two = rng.normal(size=(200, 2000)) + 12.0 * (np.arange(2000) < 300)
    for draws, expected in ((one, False), (two, True)):
        assert (has_gap(np.sort(draws)) == expected).all()


def test_gap_ignores_a_few_stray_draws():
    draws = np.random.default_rng(4).normal(size=(1, 2000))
    draws[0, :20] += 50.0
    assert not has_gap(np.sort(draws))[0]

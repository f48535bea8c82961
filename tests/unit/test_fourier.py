"""Sums of products at all lags against plain sums."""

import numpy as np
import pytest

from starkiln.inference.fourier import all_products


@pytest.mark.parametrize(("n", "columns"), [(1, 2), (96, 64), (1000, 22), (257, 3)])
def test_all_products_are_the_plain_sums(n, columns):
    rng = np.random.default_rng(n)
    series, weight = rng.normal(size=(n, columns)) + 1.0, rng.uniform(0.5, 2.0, columns)
    found = np.empty(n)
    all_products(series, weight, found)
    plain = [(series[: n - lag] * series[lag:] * weight).sum() for lag in range(n)]
    np.testing.assert_allclose(found, plain, rtol=0.0, atol=1e-13 * plain[0])

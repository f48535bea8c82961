"""How well points of the posterior agree with the data, band by band."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp
from starkiln.inference.compile import kernel
from starkiln.inference.posterior import Block, Grid, Prior, band_model, make_lanes, spline_weights


class Agreement(NamedTuple):
    """Agreement of S stars with L points each, B bands in the order of the band table.

    Attributes
    ----------
    chi2
        (S, L) over measured bands, with the total variance.
    residual
        (S, B): (observed - model) / total sigma at the first point; NaN for limits and bands not used.
    outlier
        (S, B): chance that the band is an outlier, mean over the points; NaN for limits and bands not used.
    """

    chi2: NDArray[np.float64]
    residual: NDArray[np.float64]
    outlier: NDArray[np.float64]


def compare(points: NDArray[np.float64], block: Block, grid: Grid, prior: Prior, n_bands: int) -> Agreement:
    """Compare stars with points (S, 3 + K or one more, L): ln T, ln Omega, A_V, the factors, ln jitter if fitted."""
    n_stars, _, n_points = points.shape
    result = Agreement(
        np.empty((n_stars, n_points)),
        np.full((n_stars, n_bands), np.nan),
        np.full((n_stars, n_bands), np.nan),
    )
    _compare(points, block, grid, prior, result)
    return result


@kernel
def _compare(points, block, grid, prior, result):
    n_points = points.shape[2]
    n_factors = grid.loading.shape[0]
    lanes = make_lanes(n_points, n_factors)
    f = prior.outlier_fraction
    wide = 1.0 / (prior.outlier_width * prior.outlier_width)
    for star in range(points.shape[0]):
        result.chi2[star] = 0.0
        spline_weights(points[star, 0], points[star, 2], grid, lanes)
        for i in range(n_points):
            for k in range(n_factors):
                lanes.z[k, i] = points[star, 3 + k, i]
            if prior.fit_jitter:
                lanes.jitter2[i] = exp(2.0 * points[star, 3 + n_factors, i])
        for j in range(block.n_bands[star]):
            band = block.band[star, j]
            band_model(grid, block, star, j, lanes)
            outlier = 0.0
            for i in range(n_points):
                model = min(exp(lanes.flux[i] + points[star, 1, i]) * block.inverse_error[star, j], 1e30)
                sigma = np.sqrt(1.0 + lanes.spread2[i] * model * model)
                pull = (block.scaled_flux[star, j] - model) / sigma
                if i == 0 and not block.limit[star, j]:
                    result.residual[star, band] = pull
                if not block.limit[star, j]:
                    q = pull * pull
                    result.chi2[star, i] += q
                    far = f / prior.outlier_width
                    if f > 0.0:
                        outlier += far / (far + (1.0 - f) * exp(-0.5 * q * (1.0 - wide)))
            if not block.limit[star, j]:
                result.outlier[star, band] = outlier / n_points

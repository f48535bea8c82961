"""Which offsets of zero points a run's stars ask for: the residuals that no star's own parameters can absorb.

About the mode of its posterior a star's fluxes are linear in its parameters. With r the fractional residuals of its
bands and J the derivatives of ln flux,

    r = J t + delta + noise of covariance V,

where t corrects the star's ln T, ln Omega, A_V and factors z_k, and delta are offsets of ln flux that all stars
share. The priors of A_V and z_k are rows like those of bands. The mean of each over all stars is one more shared
offset, so that a field with more dust than its prior says, or of metal-poor stars, is not taken for a wrong zero
point. With t integrated out a star gives the normal matrix N = W - W J (J' W J)^-1 J' W, W = V^-1, and the right side
N r; both add up over stars.
"""

from __future__ import annotations

from itertools import combinations
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp
from starkiln.inference.compile import kernel
from starkiln.inference.posterior import Block, Grid, Prior, band_model, make_lanes, spline_weights
from starkiln.inference.start import inverse_positive

MOST_FACTORS = 2
LEAST_BANDS = 5  # with fewer, T, Omega, A_V and one factor can fit anything
LEAST_FLUX = 1.0  # a band whose model lies below its error tells nothing of a zero point
LEAST_ERROR = 0.005  # fractional; keeps a few very bright stars from speaking for all
HUBER_SIGMA = 4.0
FIXED_POINT = 2.0**16

ENOUGH_STARS = 10_000
SHARED_MEAN_ERROR = 1.0  # of A_V in magnitudes, of z_k in its own sigmas
LEAST_ZERO_POINT_ERROR = 0.002
WRONG_SHARE = 0.3  # high, so that one wrong band is believed before many small offsets that conspire
WRONG_BY = 0.1  # fractional
MOST_WRONG = 2
DETERMINED_MAG = 0.03
MAG_PER_LN_FLUX = -2.5 / np.log(10.0)


class AuditSums(NamedTuple):
    """What stars add up to, in units of 1 / FIXED_POINT: integers, so that sums are the same in any order.

    Attributes
    ----------
    normal, right
        (M, M) and (M,) int64 with M = B + 1 + MOST_FACTORS: the bands, the mean of A_V, the means of the factors.
    misfit
        (2,) int64: chi squared at no offset, and its degrees of freedom (not in fixed point).
    stars
        (B,) int64, stars that told something of each band.
    """

    normal: NDArray[np.int64]
    right: NDArray[np.int64]
    misfit: NDArray[np.int64]
    stars: NDArray[np.int64]


class Offsets(NamedTuple):
    """The offset of each band, observed minus expected magnitude, its error, and whether the stars can tell."""

    offset_mag: NDArray[np.float64]
    error_mag: NDArray[np.float64]
    determined: NDArray[np.bool_]


def no_stars(n_bands: int) -> AuditSums:
    """Return the sums of no star."""
    n = n_bands + 1 + MOST_FACTORS
    return AuditSums(
        np.zeros((n, n), np.int64), np.zeros(n, np.int64), np.zeros(2, np.int64), np.zeros(n_bands, np.int64)
    )


def combined(one: AuditSums, other: AuditSums) -> AuditSums:
    """Return the sums of two sets of stars together."""
    return AuditSums(*(mine + theirs for mine, theirs in zip(one, other, strict=True)))


def audit_stars(points: NDArray[np.float64], block: Block, grid: Grid, prior: Prior, n_bands: int) -> AuditSums:
    """Return the sums of S stars at the modes of their posteriors.

    Parameters
    ----------
    points
        (S, 3 + K or one more, 1): ln T, ln Omega, A_V, the factors, ln jitter if fitted.
    """
    sums = no_stars(n_bands)
    _add_stars(points, block, grid, prior, sums)
    return sums


def solve_offsets(sums: AuditSums, zero_point_error: NDArray[np.float64]) -> Offsets:
    """Return the offset that the stars ask for in each band, averaged over which bands are wrong.

    Most bands are within their quoted errors, so each offset is N(0, zero_point_error^2), and at most two are wrong
    by more: for these the prior is wider by WRONG_BY, at prior odds of WRONG_SHARE. Every such set of bands is solved
    exactly, and the solutions are averaged by their evidence. Two bands that could each explain the same residuals so
    share the offset and get a large error.

    Parameters
    ----------
    zero_point_error
        (B,), fractional.

    Notes
    -----
    Misfit beyond the errors enlarges them. More than ENOUGH_STARS stars add no weight: what the model lacks is common
    to all.
    """
    n_bands = len(zero_point_error)
    normal, right = sums.normal / FIXED_POINT, sums.right / FIXED_POINT
    quoted = np.maximum(zero_point_error, LEAST_ZERO_POINT_ERROR)
    variance = np.append(quoted, np.full(len(right) - n_bands, SHARED_MEAN_ERROR)) ** 2
    weight = min(1.0, ENOUGH_STARS / max(int(sums.stars.max(initial=0)), 1))
    loose = variance + np.append(np.full(n_bands, WRONG_BY**2), np.zeros(len(right) - n_bands))
    best = _solve(normal * weight, right * weight, loose)[0]
    chi2 = sums.misfit[0] / FIXED_POINT - 2.0 * best @ right + best @ normal @ best
    weight /= max(1.0, chi2 / max(int(sums.misfit[1]), 1))
    sets = [wrong for size in range(MOST_WRONG + 1) for wrong in combinations(range(n_bands), size)]
    log_weight, mean, second = np.empty(len(sets)), np.empty((len(sets), n_bands)), np.empty((len(sets), n_bands))
    for place, wrong in enumerate(sets):
        prior = variance.copy()
        prior[list(wrong)] += WRONG_BY**2
        solution, covariance, log_evidence = _solve(normal * weight, right * weight, prior)
        log_odds = np.log(WRONG_SHARE) - np.log1p(-WRONG_SHARE)
        log_weight[place] = log_evidence + len(wrong) * log_odds
        mean[place] = solution[:n_bands]
        second[place] = np.diag(covariance)[:n_bands] + mean[place] ** 2
    share = np.exp(log_weight - log_weight.max())
    share /= share.sum()
    offset = share @ mean
    error_mag = np.sqrt(np.maximum(share @ second - offset**2, 0.0)) * abs(MAG_PER_LN_FLUX)
    return Offsets(offset * MAG_PER_LN_FLUX, error_mag, (error_mag < DETERMINED_MAG) & (sums.stars > 0))


def _solve(
    normal: NDArray[np.float64], right: NDArray[np.float64], prior_variance: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], float]:
    """Return mean, covariance and log evidence of offsets with independent Gaussian priors about zero."""
    scale = np.sqrt(prior_variance)
    matrix = np.eye(len(right)) + scale[:, None] * normal * scale
    covariance = scale[:, None] * np.linalg.inv(matrix) * scale
    mean = covariance @ right
    return mean, covariance, float(0.5 * right @ mean - 0.5 * np.linalg.slogdet(matrix)[1])


@kernel
def _add_stars(points, block, grid, prior, sums):
    n_factors = grid.loading.shape[0]
    n_bands = sums.stars.size
    n_rows = n_bands + 1 + n_factors
    lanes = make_lanes(3 + n_factors, n_factors)
    jacobian = np.empty((n_rows, 2 + prior.fit_av + n_factors))
    weight = np.empty(n_rows)
    residual = np.empty(n_rows)
    place = np.empty(n_rows, np.int64)
    for star in range(points.shape[0]):
        jacobian[:] = 0.0
        measured = _band_rows(points[star, :, 0], block, star, grid, prior, lanes, jacobian, weight, residual, place)
        if measured < LEAST_BANDS:
            continue
        n = _prior_rows(points[star, :, 0], block, star, n_factors, prior, measured, jacobian, weight, residual, place)
        for row in range(measured, n):
            place[row] += n_bands
        _add_star(jacobian[:n], weight[:n], residual[:n], place[:n], sums)
        for row in range(measured):
            sums.stars[place[row]] += 1


@kernel
def _band_rows(point, block, star, grid, prior, lanes, jacobian, weight, residual, place):
    """Write a row for each band that can tell, and return how many there are."""
    n_factors = grid.loading.shape[0]
    step_t, step_a = 1e-3, 1e-2
    # Lane 0 is the mode; lane 1 a step in ln T, lane 2 in A_V, the others in the factors.
    ln_teff = np.full(3 + n_factors, point[0])
    av = np.full(3 + n_factors, point[2])
    ln_teff[1] += step_t
    av[2] += step_a
    for k in range(n_factors):
        lanes.z[k] = point[3 + k]
        lanes.z[k, 3 + k] += 1.0
    if prior.fit_jitter:
        lanes.jitter2[:] = exp(2.0 * point[3 + n_factors])
    spline_weights(ln_teff, av, grid, lanes)
    flux = lanes.flux
    row = 0
    for j in range(block.n_bands[star]):
        band_model(grid, block, star, j, lanes)
        model = min(exp(flux[0] + point[1]) * block.inverse_error[star, j], 1e30)
        if block.limit[star, j] or model < LEAST_FLUX:
            continue
        residual[row] = (block.scaled_flux[star, j] - model) / model
        variance = 1.0 / (model * model) + lanes.spread2[0]
        far = abs(residual[row]) / (HUBER_SIGMA * np.sqrt(variance))
        weight[row] = 1.0 / (max(variance, LEAST_ERROR * LEAST_ERROR) * max(far * far, 1.0))
        jacobian[row, 0] = (flux[1] - flux[0]) / step_t
        jacobian[row, 1] = 1.0
        if prior.fit_av:
            jacobian[row, 2] = (flux[2] - flux[0]) / step_a
        for k in range(n_factors):
            jacobian[row, 2 + prior.fit_av + k] = flux[3 + k] - flux[0]
        place[row] = block.band[star, j]
        row += 1
    return row


@kernel
def _prior_rows(point, block, star, n_factors, prior, row, jacobian, weight, residual, place):
    """Write the rows of the priors from ``row`` on, placed from 0, and return how many rows there are now."""
    if prior.fit_av:
        # An exponential has no curvature of its own; its scale stands in.
        rate, inverse_variance = block.av_rate[star], block.av_inverse_variance[star]
        weight[row] = inverse_variance + rate * rate
        residual[row] = (inverse_variance * (block.av_mean[star] - point[2]) - rate) / weight[row]
        jacobian[row, 2] = 1.0
        place[row] = 0
        row += 1
    for k in range(n_factors):
        weight[row] = 1.0
        residual[row] = -point[3 + k]
        jacobian[row, 2 + prior.fit_av + k] = 1.0
        place[row] = 1 + k
        row += 1
    return row


@kernel
def _add_star(jacobian, weight, residual, place, sums):
    n, n_columns = jacobian.shape
    curvature = np.zeros((n_columns, n_columns))
    gradient = np.zeros(n_columns)
    for i in range(n):
        for k in range(n_columns):
            gradient[k] += jacobian[i, k] * weight[i] * residual[i]
            for m in range(n_columns):
                curvature[k, m] += jacobian[i, k] * weight[i] * jacobian[i, m]
    inverse = inverse_positive(curvature)
    chi2 = 0.0
    for i in range(n):
        right = residual[i]
        for k in range(n_columns):
            for m in range(n_columns):
                right -= jacobian[i, k] * inverse[k, m] * gradient[m]
        right *= weight[i]
        chi2 += right * residual[i]
        sums.right[place[i]] += _fixed(right)
        for j in range(n):
            value = weight[i] if i == j else 0.0
            for k in range(n_columns):
                for m in range(n_columns):
                    value -= weight[i] * jacobian[i, k] * inverse[k, m] * jacobian[j, m] * weight[j]
            sums.normal[place[i], place[j]] += _fixed(value)
    sums.misfit[0] += _fixed(chi2)
    sums.misfit[1] += n - n_columns


@kernel
def _fixed(value):
    return np.int64(np.rint(value * FIXED_POINT))

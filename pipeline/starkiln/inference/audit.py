"""Which offsets of zero points a run's stars ask for: the residuals that no star's own parameters can absorb.

About the mode of its posterior a star's fluxes are linear in its parameters. With r the fractional residuals of its
bands and J the derivatives of ln flux,

    r = J t + delta + noise of covariance V,

where t corrects the star's ln T, ln Omega, A_V and factors z_k, and delta are offsets of ln flux that all stars
share. The priors of A_V and z_k are rows like those of bands. The mean of each over all stars is one more shared
offset, so that a field with more dust than its prior says, or of metal-poor stars, is not taken for a wrong zero
point. With t integrated out a star gives the normal matrix N = W - W J (J' W J)^-1 J' W, W = V^-1, and the right side
N r; both add up over stars. A wrong zero point has moved the modes, and its residuals look like outliers: so the
offsets found are taken out of the fluxes, the modes climbed again, and what is left is solved for once more.

Offsets that look like a change of T, A_V or a factor in all stars leave few residuals, or none; there the prior
decides. Most bands are within their quoted errors, better by a common factor that the bands themselves tell, and at
most two are wrong by more.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from itertools import chain, combinations
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp, exp_array, log_array
from starkiln.inference.compile import kernel
from starkiln.inference.posterior import LN_HEAT_K, Block, Grid, Prior, band_model, make_lanes, spline_weights
from starkiln.inference.start import climb, inverse_positive

MOST_FACTORS = 2
LEAST_BANDS = 5  # with fewer, T, Omega, A_V and one factor can fit anything
LEAST_FLUX = 1.0  # a band whose model lies below its error tells nothing of a zero point
LEAST_ERROR = 0.005  # fractional; keeps a few very bright stars from speaking for all
HUBER_SIGMA = 4.0
FIXED_POINT = 2.0**16

ENOUGH_STARS = 10_000  # more add nothing: what the model lacks is common to all
ROUNDS = 4  # an offset of 0.4 mag takes three
SHARED_MEAN_ERROR = 1.0  # of A_V in magnitudes, of z_k in its own sigmas
LEAST_ZERO_POINT_ERROR = 0.002
LEAST_SCALED_ERROR = 0.0002
ERROR_SCALES = (0.02, 0.05, 0.2, 1.0, 1.5, 2.0, 3.0)  # of the quoted errors: far better, or about as quoted
WRONG_SHARE = 0.3  # high, so that one wrong band is believed before many small offsets that conspire
WRONG_BY = 0.1  # fractional
MOST_WRONG = 2
DETERMINED_MAG = 0.03
MAG_PER_LN_FLUX = -2.5 / np.log(10.0)


class AuditSums(NamedTuple):
    """What stars add up to: a sample of them that is the same in whatever order and parts they were added.

    Attributes
    ----------
    key
        (S,) uint64, a hash of each star's data; the sample is the stars with the least keys.
    is_blackbody
        (S,) bool: fitted as a bare blackbody.
    points
        (S, 4 + MOST_FACTORS): the mode of each star, as :func:`sample_stars` takes it, zeros after it.
    block
        The data of the stars.
    """

    key: NDArray[np.uint64]
    is_blackbody: NDArray[np.bool_]
    points: NDArray[np.float64]
    block: Block


class Equations(NamedTuple):
    """The linear equations of the offsets, in units of 1 / FIXED_POINT: integers, so that order does not matter.

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
    """The offset of each band, observed minus expected magnitude, its error, whether stars can tell, how many told."""

    offset_mag: NDArray[np.float64]
    error_mag: NDArray[np.float64]
    determined: NDArray[np.bool_]
    stars: NDArray[np.int64]


def no_stars(n_bands: int) -> AuditSums:
    """Return the sums of no star."""
    shape, column = (0, n_bands), np.empty(0)
    count, place, flag = np.empty(0, np.int64), np.empty(shape, np.int64), np.empty(shape, np.bool_)
    block = Block(count, place, np.empty(shape), np.empty(shape), np.empty(shape), flag, *[column] * 6)
    return AuditSums(np.empty(0, np.uint64), np.empty(0, np.bool_), np.empty((0, 4 + MOST_FACTORS)), block)


def combined(one: AuditSums, other: AuditSums) -> AuditSums:
    """Return the sums of two sets of stars together."""
    return _least(
        AuditSums(
            np.concatenate([one.key, other.key]),
            np.concatenate([one.is_blackbody, other.is_blackbody]),
            np.concatenate([one.points, other.points]),
            Block(*(np.concatenate(both) for both in zip(one.block, other.block, strict=True))),
        )
    )


def sample_stars(points: NDArray[np.float64], block: Block, *, is_blackbody: bool) -> AuditSums:
    """Return the sums of S stars at the modes of their posteriors; stars with too few bands are left out.

    Parameters
    ----------
    points
        (S, 3 + K or one more, 1): ln T, ln Omega, A_V, the factors, ln jitter if fitted.
    """
    usable = np.arange(block.limit.shape[1]) < block.n_bands[:, None]
    stars = np.flatnonzero((usable & ~block.limit).sum(axis=1) >= LEAST_BANDS)
    padded = np.zeros((len(stars), 4 + MOST_FACTORS))
    padded[:, : points.shape[1]] = points[stars, :, 0]
    some = block.take(stars)
    # Two stars of the same key are the same in all that is kept, so that it does not matter which is.
    rows = np.column_stack([padded, *some])
    keys = [int.from_bytes(hashlib.blake2b(row.tobytes(), digest_size=8).digest()) for row in rows]
    return _least(AuditSums(np.array(keys, np.uint64), np.full(len(stars), is_blackbody), padded, some))


def _least(sums: AuditSums) -> AuditSums:
    """Return the sample of the ENOUGH_STARS least keys, in their order."""
    stars = np.argsort(sums.key, kind="stable")[:ENOUGH_STARS]
    return AuditSums(sums.key[stars], sums.is_blackbody[stars], sums.points[stars], sums.block.take(stars))


def find_offsets(
    sums: AuditSums, models: dict[bool, tuple[Grid, Prior]], zero_point_error: NDArray[np.float64]
) -> Offsets:
    """Return the offset that the stars ask for in each band.

    Parameters
    ----------
    models
        Grid and prior that stars were fitted with, by whether it is the bare blackbody's.
    zero_point_error
        (B,), fractional.
    """
    kinds = []
    for is_blackbody, (grid, prior) in models.items():
        stars = np.flatnonzero(sums.is_blackbody == is_blackbody)
        n_points = 3 + len(grid.loading) + prior.fit_jitter
        kinds.append((sums.points[stars, :n_points], sums.block.take(stars), grid, prior))
    about = np.zeros(len(zero_point_error))
    for _ in range(ROUNDS):
        equations = no_equations(len(about))
        for points, block, grid, prior in kinds:
            corrected = block._replace(scaled_flux=block.scaled_flux * exp_array(-about)[block.band])
            _climb_points(points, corrected, grid, prior)
            add_equations(points[:, :, None], corrected, grid, prior, equations)
        found = solve_offsets(equations, zero_point_error, about)
        about = found.offset_mag / MAG_PER_LN_FLUX
    return found


def _climb_points(points: NDArray[np.float64], block: Block, grid: Grid, prior: Prior) -> None:
    """Move points (S, n) to the tops of their peaks, in place."""
    heat = exp_array(LN_HEAT_K - points[:, 0])
    first = 2 if prior.fit_av else 3
    coords = np.ascontiguousarray(np.column_stack([heat, points[:, 1] + points[:, 0], points[:, first:]]))
    climb(block, grid, prior, coords)
    points[:, 0] = LN_HEAT_K - log_array(coords[:, 0])
    points[:, 1] = coords[:, 1] - points[:, 0]
    points[:, first:] = coords[:, 2:]


def no_equations(n_bands: int) -> Equations:
    """Return the equations of no star."""
    n = n_bands + 1 + MOST_FACTORS
    return Equations(
        np.zeros((n, n), np.int64), np.zeros(n, np.int64), np.zeros(2, np.int64), np.zeros(n_bands, np.int64)
    )


def add_equations(points: NDArray[np.float64], block: Block, grid: Grid, prior: Prior, equations: Equations) -> None:
    """Add to equations those of S stars at the modes of their posteriors, ``points`` as in `sample_stars`."""
    _add_stars(np.ascontiguousarray(points), block, grid, prior, equations)


def solve_offsets(
    equations: Equations, zero_point_error: NDArray[np.float64], about: NDArray[np.float64] | None = None
) -> Offsets:
    """Return the offsets that solve the equations, averaged over which bands are wrong and how good the others are.

    Each offset is N(0, (scale * zero_point_error)^2), with one of ERROR_SCALES for all bands, and at most two are wrong
    by more: for these the prior is wider by WRONG_BY, at prior odds of WRONG_SHARE. Every such case is solved exactly,
    and the solutions are averaged by their evidence. Two bands that could each explain the same residuals so share the
    offset and get a large error; and bands that agree with one another far better than quoted leave little doubt about
    one that does not.

    Parameters
    ----------
    zero_point_error
        (B,), fractional.
    about
        (B,): offsets of ln flux that the equations' fluxes have been freed from; none by default.

    Notes
    -----
    Misfit beyond the errors enlarges them.
    """
    n_bands = len(zero_point_error)
    normal, right = equations.normal / FIXED_POINT, equations.right / FIXED_POINT
    quoted = np.maximum(zero_point_error, LEAST_ZERO_POINT_ERROR)
    means = np.full(len(right) - n_bands, SHARED_MEAN_ERROR)
    free = _solve(normal, right, np.append(np.hypot(quoted, WRONG_BY), means) ** 2)[0]
    chi2 = equations.misfit[0] / FIXED_POINT - 2.0 * free @ right + free @ normal @ free
    weight = 1.0 / max(1.0, chi2 / max(int(equations.misfit[1]), 1))
    if about is not None:
        right = right + normal[:, :n_bands] @ about
    log_weight, mean, second = [], [], []
    for variance, log_prior in _priors(quoted, means):
        solution, covariance, log_evidence = _solve(normal * weight, right * weight, variance)
        log_weight.append(log_evidence + log_prior)
        mean.append(solution[:n_bands])
        second.append(np.diag(covariance)[:n_bands] + solution[:n_bands] ** 2)
    share = np.exp(np.array(log_weight) - max(log_weight))
    share /= share.sum()
    offset = share @ np.array(mean)
    error_mag = np.sqrt(np.maximum(share @ np.array(second) - offset**2, 0.0)) * abs(MAG_PER_LN_FLUX)
    determined = (error_mag < DETERMINED_MAG) & (equations.stars > 0)
    return Offsets(offset * MAG_PER_LN_FLUX, error_mag, determined, equations.stars)


def _priors(quoted: NDArray[np.float64], means: NDArray[np.float64]) -> Iterator[tuple[NDArray[np.float64], float]]:
    """Yield variance and log probability of every case: how good the bands are, and which are wrong."""
    bands = range(len(quoted))
    log_odds = np.log(WRONG_SHARE) - np.log1p(-WRONG_SHARE)
    for scale in ERROR_SCALES:
        usual = np.append(np.maximum(scale * quoted, LEAST_SCALED_ERROR), means) ** 2
        for wrong in chain.from_iterable(combinations(bands, size) for size in range(MOST_WRONG + 1)):
            variance = usual.copy()
            variance[list(wrong)] += WRONG_BY**2
            yield variance, len(wrong) * log_odds


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
def _add_stars(points, block, grid, prior, equations):
    n_factors = grid.loading.shape[0]
    n_bands = equations.stars.size
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
        _add_star(jacobian[:n], weight[:n], residual[:n], place[:n], equations)
        for row in range(measured):
            equations.stars[place[row]] += 1


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
def _add_star(jacobian, weight, residual, place, equations):
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
        equations.right[place[i]] += _fixed(right)
        for j in range(n):
            value = weight[i] if i == j else 0.0
            for k in range(n_columns):
                for m in range(n_columns):
                    value -= weight[i] * jacobian[i, k] * inverse[k, m] * jacobian[j, m] * weight[j]
            equations.normal[place[i], place[j]] += _fixed(value)
    equations.misfit[0] += _fixed(chi2)
    equations.misfit[1] += n - n_columns


@kernel
def _fixed(value):
    return np.int64(np.rint(value * FIXED_POINT))

"""The photometric log-posterior of a block of stars, one star's walkers to a vector lane each.

Walkers live in the coordinates in which the posterior is closest to Gaussian: ``heat`` = 1e4 K / T,
``glow`` = ln(Omega T) with Omega = (R/d)^2, A_V in magnitudes when it is fitted, the photosphere's common factors z_k,
and the logarithm of the jitter when that is fitted. The prior is uniform in ln T and ln Omega, so the density in these
coordinates carries the Jacobian T.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp, log, log_normal_cdf
from starkiln.inference.compile import kernel

HEAT_K = 1e4
LN_HEAT_K = float(np.log(HEAT_K))


class Grid(NamedTuple):
    """The band table and the photosphere's factors as kernels read them: uniform cubic B-spline coefficients.

    Attributes
    ----------
    coef
        (n_bands * n_rows * n_columns,), flattened, of ln(flux / Omega Jy) on a (ln T, A_V) grid.
    loading
        (K, n_bands, n_rows): change of ln flux for each unit of the common factors z_k.
    scatter
        (n_bands, n_rows): scatter of ln flux that is a band's own.
    """

    coef: NDArray[np.float64]
    n_rows: int
    n_columns: int
    ln_teff_min: float
    ln_teff_step: float
    av_step: float
    loading: NDArray[np.float64]
    scatter: NDArray[np.float64]


class Prior(NamedTuple):
    """Bounds and prior parameters shared by all stars, and the outlier mixture."""

    ln_teff_min: float
    ln_teff_max: float
    ln_omega_min: float
    ln_omega_max: float
    av_max: float
    fit_av: bool
    outlier_fraction: float  # 0 turns the mixture off
    outlier_width: float
    fit_jitter: bool
    ln_jitter_min: float  # the fractional jitter is uniform in its logarithm from here to 1


def n_parameters(grid: Grid, prior: Prior) -> int:
    """Return the number of coordinates of a walker: heat, glow, A_V if fitted, factors, ln jitter if fitted."""
    return 2 + prior.fit_av + len(grid.loading) + prior.fit_jitter


class Block(NamedTuple):
    """The data of S stars, each with its usable bands packed first.

    Attributes
    ----------
    n_bands
        (S,) int64, usable bands of each star.
    band
        (S, B) int64, index into the band table.
    scaled_flux, inverse_error, floor
        (S, B): flux / error, 1 / error in 1/Jy, and the fractional floor with the zero point's error.
    limit
        (S, B) bool.
    av_mean, av_inverse_variance, av_rate
        (S,): minus the log prior of A_V is (A_V - mean)^2 * inverse variance / 2 + rate * A_V.
    av_fixed
        (S,) magnitudes, used when A_V is not fitted.
    factor_scale
        (S,): multiplies loadings and scatter, 1 for dwarfs.
    log_norm
        (S,): constant of the likelihood, minus the sum of ln(sqrt(2 pi) error).
    """

    n_bands: NDArray[np.int64]
    band: NDArray[np.int64]
    scaled_flux: NDArray[np.float64]
    inverse_error: NDArray[np.float64]
    floor: NDArray[np.float64]
    limit: NDArray[np.bool_]
    av_mean: NDArray[np.float64]
    av_inverse_variance: NDArray[np.float64]
    av_rate: NDArray[np.float64]
    av_fixed: NDArray[np.float64]
    factor_scale: NDArray[np.float64]
    log_norm: NDArray[np.float64]

    def take(self, stars: NDArray[np.int64]) -> Block:
        """Return the block of some of the stars."""
        columns = {name: getattr(self, name)[stars] for name in self._fields}
        return Block(**columns)


class Lanes(NamedTuple):
    """Buffers for L walkers of one star: where they are on the grid, their factors, and one band's model."""

    row_weight: NDArray[np.float64]
    column_weight: NDArray[np.float64]
    row: NDArray[np.uint64]
    corner: NDArray[np.uint64]
    z: NDArray[np.float64]
    jitter2: NDArray[np.float64]
    flux: NDArray[np.float64]
    spread2: NDArray[np.float64]


@kernel
def make_lanes(n, n_factors):
    """Return the buffers for n lanes, without jitter."""
    return Lanes(
        np.empty((4, n)),
        np.empty((4, n)),
        np.empty(n, dtype=np.uint64),
        np.empty(n, dtype=np.uint64),
        np.zeros((n_factors, n)),
        np.zeros(n),
        np.empty(n),
        np.empty(n),
    )


@kernel
def log_posterior(coords, block, grid, prior, out):
    """Write the log-posterior of every walker.

    Parameters
    ----------
    coords
        (S * L, ndim) with the L walkers of a star next to each other.
    out
        (S * L,); minus infinity outside the bounds.
    """
    n_stars = block.n_bands.size
    n = coords.shape[0] // n_stars
    lanes = make_lanes(n, grid.loading.shape[0])
    ln_omega = np.empty(n)
    ln_teff = np.empty(n)
    av = np.empty(n)
    total = np.empty(n)
    product = np.empty(n)
    outside = np.empty(n)
    for star in range(n_stars):
        mine = coords[star * n : (star + 1) * n]
        read_coords(mine, block.av_fixed[star], prior, ln_teff, ln_omega, av, lanes)
        add_prior(ln_teff, ln_omega, av, block, star, prior, lanes, total, outside)
        product[:] = 1.0
        spline_weights(ln_teff, av, grid, lanes)
        for j in range(block.n_bands[star]):
            band_model(grid, block, star, j, lanes)
            if block.limit[star, j]:
                add_limit(lanes, ln_omega, block, star, j, total)
            else:
                add_band(lanes, ln_omega, block, star, j, prior, total, product)
            if j % 4 == 3:
                for i in range(n):
                    total[i] += 0.5 * log(product[i])
                    product[i] = 1.0
        for i in range(n):
            out[star * n + i] = total[i] + 0.5 * log(product[i]) + outside[i]


@kernel
def read_coords(coords, av_fixed, prior, ln_teff, ln_omega, av, lanes):
    """Split positions (L, ndim) into ln T, ln Omega, A_V, factors and squared jitter."""
    n = ln_teff.size
    for i in range(n):
        ln_teff[i] = LN_HEAT_K - log(max(coords[i, 0], 1e-300))
        ln_omega[i] = coords[i, 1] - ln_teff[i]
    first = 2
    if prior.fit_av:
        first = 3
        for i in range(n):
            av[i] = coords[i, 2]
    else:
        for i in range(n):
            av[i] = av_fixed
    for k in range(lanes.z.shape[0]):
        for i in range(n):
            lanes.z[k, i] = coords[i, first + k]
    if prior.fit_jitter:
        for i in range(n):
            lanes.jitter2[i] = exp(2.0 * coords[i, first + lanes.z.shape[0]])


@kernel
def add_prior(ln_teff, ln_omega, av, block, star, prior, lanes, total, outside):
    """Start the total with constant, Jacobian and priors, and pull what lies outside the bounds onto them."""
    least_jitter2 = exp(2.0 * prior.ln_jitter_min)
    for i in range(ln_teff.size):
        bad = (
            (ln_teff[i] < prior.ln_teff_min)
            | (ln_teff[i] > prior.ln_teff_max)
            | (ln_omega[i] < prior.ln_omega_min)
            | (ln_omega[i] > prior.ln_omega_max)
            | (av[i] < 0.0)
            | (av[i] > prior.av_max)
            | (prior.fit_jitter & ((lanes.jitter2[i] < least_jitter2) | (lanes.jitter2[i] > 1.0)))
        )
        outside[i] = -np.inf if bad else 0.0
        ln_teff[i] = min(max(ln_teff[i], prior.ln_teff_min), prior.ln_teff_max)
        ln_omega[i] = min(max(ln_omega[i], prior.ln_omega_min), prior.ln_omega_max)
        av[i] = min(max(av[i], 0.0), prior.av_max)
        offset = av[i] - block.av_mean[star]
        total[i] = (
            block.log_norm[star]
            + ln_teff[i]
            - 0.5 * offset * offset * block.av_inverse_variance[star]
            - av[i] * block.av_rate[star]
        )
    for k in range(lanes.z.shape[0]):
        for i in range(ln_teff.size):
            total[i] -= 0.5 * lanes.z[k, i] * lanes.z[k, i]


@kernel
def spline_weights(ln_teff, av, grid, lanes):
    """Write the four uniform cubic B-spline weights along each axis and the corner of each lane's cell."""
    last_row = np.float64(grid.n_rows - 4)
    last_column = np.float64(grid.n_columns - 4)
    inverse_row = 1.0 / grid.ln_teff_step
    inverse_column = 1.0 / grid.av_step
    for i in range(ln_teff.size):
        x = (ln_teff[i] - grid.ln_teff_min) * inverse_row
        cell = min(np.floor(x), last_row)
        t = x - cell
        lanes.row_weight[0, i] = (1.0 - t) * (1.0 - t) * (1.0 - t) / 6.0
        lanes.row_weight[1, i] = (4.0 + t * t * (3.0 * t - 6.0)) / 6.0
        lanes.row_weight[2, i] = (1.0 + t * (3.0 + t * (3.0 - 3.0 * t))) / 6.0
        lanes.row_weight[3, i] = t * t * t / 6.0
        y = av[i] * inverse_column
        column = min(np.floor(y), last_column)
        t = y - column
        lanes.column_weight[0, i] = (1.0 - t) * (1.0 - t) * (1.0 - t) / 6.0
        lanes.column_weight[1, i] = (4.0 + t * t * (3.0 * t - 6.0)) / 6.0
        lanes.column_weight[2, i] = (1.0 + t * (3.0 + t * (3.0 - 3.0 * t))) / 6.0
        lanes.column_weight[3, i] = t * t * t / 6.0
        lanes.row[i] = np.uint64(np.int64(cell))
        lanes.corner[i] = np.uint64(np.int64(cell) * grid.n_columns + np.int64(column))


@kernel
def band_model(grid, block, star, j, lanes):
    """Write, for a star's j-th band, ln(flux / Omega Jy) and the squared fractional spread about it."""
    band = block.band[star, j]
    scale = block.factor_scale[star]
    floor2 = block.floor[star, j] * block.floor[star, j]
    one, two, three = np.uint64(1), np.uint64(2), np.uint64(3)
    spline_value(grid, band, lanes.row_weight, lanes.column_weight, lanes.corner, lanes.flux)
    scatter = grid.scatter[band]
    weight = lanes.row_weight
    for i in range(lanes.flux.size):
        k = lanes.row[i]
        u = scale * (
            (weight[0, i] * scatter[k] + weight[1, i] * scatter[k + one])
            + (weight[2, i] * scatter[k + two] + weight[3, i] * scatter[k + three])
        )
        lanes.spread2[i] = floor2 + u * u + lanes.jitter2[i]
    for factor in range(lanes.z.shape[0]):
        loading = grid.loading[factor, band]
        for i in range(lanes.flux.size):
            k = lanes.row[i]
            value = scale * (
                (weight[0, i] * loading[k] + weight[1, i] * loading[k + one])
                + (weight[2, i] * loading[k + two] + weight[3, i] * loading[k + three])
            )
            lanes.flux[i] += value * lanes.z[factor, i]


@kernel
def spline_value(grid, band, row_weight, column_weight, corner, out):
    """Write ln(band flux / (Omega Jy)) of each lane for one band."""
    base = np.uint64(band * grid.n_rows * grid.n_columns)
    stride = np.uint64(grid.n_columns)
    one, two, three = np.uint64(1), np.uint64(2), np.uint64(3)
    for i in range(out.size):
        c0, c1 = column_weight[0, i], column_weight[1, i]
        c2, c3 = column_weight[2, i], column_weight[3, i]
        k = base + corner[i]
        value = row_weight[0, i] * (
            (c0 * grid.coef[k] + c1 * grid.coef[k + one]) + (c2 * grid.coef[k + two] + c3 * grid.coef[k + three])
        )
        k += stride
        value += row_weight[1, i] * (
            (c0 * grid.coef[k] + c1 * grid.coef[k + one]) + (c2 * grid.coef[k + two] + c3 * grid.coef[k + three])
        )
        k += stride
        value += row_weight[2, i] * (
            (c0 * grid.coef[k] + c1 * grid.coef[k + one]) + (c2 * grid.coef[k + two] + c3 * grid.coef[k + three])
        )
        k += stride
        value += row_weight[3, i] * (
            (c0 * grid.coef[k] + c1 * grid.coef[k + one]) + (c2 * grid.coef[k + two] + c3 * grid.coef[k + three])
        )
        out[i] = value


@kernel
def add_band(lanes, ln_omega, block, star, j, prior, total, product):
    """Add one detected band: all of it but a logarithm, whose argument is gathered in ``product``.

    With q = (residual / total sigma)^2, v = total variance / error^2, fraction f and width w, the
    mixture (1-f) N(0, v) + f N(0, w^2 v) is exp(-q/2w^2) [(1-f) exp(-q/2 (1 - 1/w^2)) + f/w] / sqrt(v).
    The bracket never falls below f/w, so a product of four of them needs one logarithm.
    """
    observed = block.scaled_flux[star, j]
    inverse_error = block.inverse_error[star, j]
    flux, spread2 = lanes.flux, lanes.spread2
    f = prior.outlier_fraction
    if f > 0.0:
        wide = 1.0 / (prior.outlier_width * prior.outlier_width)
        far = f / prior.outlier_width
        for i in range(flux.size):
            model = min(exp(flux[i] + ln_omega[i]) * inverse_error, 1e30)
            residual = observed - model
            inverse_variance = 1.0 / (1.0 + spread2[i] * model * model)
            q = residual * residual * inverse_variance
            bracket = (1.0 - f) * exp(-0.5 * q * (1.0 - wide)) + far
            total[i] -= 0.5 * q * wide
            product[i] *= bracket * bracket * inverse_variance
    else:
        for i in range(flux.size):
            model = min(exp(flux[i] + ln_omega[i]) * inverse_error, 1e30)
            residual = observed - model
            inverse_variance = 1.0 / (1.0 + spread2[i] * model * model)
            total[i] -= 0.5 * residual * residual * inverse_variance
            product[i] *= inverse_variance


@kernel
def add_limit(lanes, ln_omega, block, star, j, total):
    """Add one upper limit, ln Phi((limit - model) / total sigma)."""
    for i in range(ln_omega.size):
        model = min(exp(lanes.flux[i] + ln_omega[i]) * block.inverse_error[star, j], 1e30)
        sigma = np.sqrt(1.0 + lanes.spread2[i] * model * model)
        total[i] += log_normal_cdf((block.scaled_flux[star, j] - model) / sigma)

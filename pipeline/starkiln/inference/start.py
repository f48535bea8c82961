"""The peaks of each star's posterior: a grid in (T, A_V), Levenberg-Marquardt from its best nodes, and curvatures."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import HALF_LN_2PI, exp, log, log_normal_cdf, put
from starkiln.inference.compile import kernel
from starkiln.inference.posterior import (
    LN_HEAT_K,
    Block,
    Grid,
    Lanes,
    Prior,
    add_band,
    band_model,
    make_lanes,
    n_parameters,
    read_coords,
    spline_weights,
)

MAX_MODES = 3
FIRST_LN_JITTER = -5.0
LN_TEFF_STRIDE = 0.06
ONLY = np.int64(0)
"""The star of a block of one: for a plain 0, kernels would be compiled a second time."""
AV_NODES = (0.0, 0.1, 0.3, 0.6, 1.0, 1.5, 2.25, 3.0, 4.0, 6.0, 9.0)


class Modes(NamedTuple):
    """Up to MAX_MODES separate peaks of each star's posterior, best first.

    Attributes
    ----------
    n_modes
        (S,) int64.
    coords
        (S, MAX_MODES, ndim).
    log_density
        (S, MAX_MODES).
    covariance
        (S, MAX_MODES, ndim, ndim), the inverse of the Gauss-Newton curvature.
    """

    n_modes: NDArray[np.int64]
    coords: NDArray[np.float64]
    log_density: NDArray[np.float64]
    covariance: NDArray[np.float64]


def find_modes(block: Block, grid: Grid, prior: Prior) -> Modes:
    """Find the separate peaks of every star's posterior."""
    n_stars = block.n_bands.size
    ndim = n_parameters(grid, prior)
    n_nodes = int(np.ceil((prior.ln_teff_max - prior.ln_teff_min) / LN_TEFF_STRIDE)) + 1
    ln_teff = np.linspace(prior.ln_teff_min, prior.ln_teff_max, n_nodes)
    av = np.array([a for a in AV_NODES if a <= prior.av_max]) if prior.fit_av else np.zeros(1)
    modes = Modes(
        np.zeros(n_stars, np.int64),
        np.zeros((n_stars, MAX_MODES, ndim)),
        np.full((n_stars, MAX_MODES), -np.inf),
        np.zeros((n_stars, MAX_MODES, ndim, ndim)),
    )
    _search(block, grid, prior, ln_teff, av, modes)
    return modes


def climb(block: Block, grid: Grid, prior: Prior, coords: NDArray[np.float64]) -> None:
    """Move each star's point (S, ndim) to the top of the peak it stands on, in place."""
    _climb_all(block, grid, prior, coords)


@kernel
def _climb_all(block, grid, prior, coords):
    here, there = _two_slopes(coords.shape[1], grid)
    for star in range(coords.shape[0]):
        _climb(one_star(block, star), grid, prior, coords[star], here, there)


@kernel
def _two_slopes(ndim, grid):
    n_factors = grid.loading.shape[0]
    return make_slopes(ndim, n_factors), make_slopes(ndim, n_factors)


@kernel
def _search(block, grid, prior, ln_teff_nodes, av_nodes, modes):
    n_nodes = ln_teff_nodes.size
    profile = np.empty(n_nodes)
    best_av = np.empty(n_nodes)
    best_ln_omega = np.empty(n_nodes)
    for star in range(block.n_bands.size):
        one = one_star(block, star)
        _profile(one, grid, prior, ln_teff_nodes, av_nodes, profile, best_av, best_ln_omega)
        _climb_peaks(one, grid, prior, ln_teff_nodes, profile, best_av, best_ln_omega, modes, star)
        if prior.outlier_fraction > 0.0 and _has_outlier(one, grid, prior, modes.coords[star, :1]):
            # Least squares bend to an outlier and may miss the peaks that leave it out.
            _profile_by_band(one, grid, prior, ln_teff_nodes, av_nodes, profile, best_av, best_ln_omega)
            _climb_peaks(one, grid, prior, ln_teff_nodes, profile, best_av, best_ln_omega, modes, star)


@kernel
def _climb_peaks(one, grid, prior, ln_teff_nodes, profile, best_av, best_ln_omega, modes, star):
    """Climb from the highest peaks of a profile, and keep where that leads."""
    ndim = modes.coords.shape[2]
    point = np.empty(ndim)
    here, there = _two_slopes(ndim, grid)
    for _ in range(MAX_MODES + 1):
        peak = _highest_peak(profile)
        if peak < 0:
            break
        point[0] = exp(LN_HEAT_K - ln_teff_nodes[peak])
        point[1] = best_ln_omega[peak] + ln_teff_nodes[peak]
        point[2:] = 0.0
        if prior.fit_av:
            point[2] = best_av[peak]
        if prior.fit_jitter:
            point[ndim - 1] = max(FIRST_LN_JITTER, prior.ln_jitter_min)
        value, here, there = _climb(one, grid, prior, point, here, there)
        profile[peak] = np.nan
        if value > -np.inf:
            _keep(modes, star, point, value, here.curvature)


@kernel
def _has_outlier(one, grid, prior, coords):
    """Return whether a band is more likely an outlier than not at a point (1, ndim)."""
    lanes = make_lanes(coords.shape[0], grid.loading.shape[0])
    ln_teff, ln_omega, av = np.empty(1), np.empty(1), np.empty(1)
    read_coords(coords, one.av_fixed[0], prior, ln_teff, ln_omega, av, lanes)
    spline_weights(ln_teff, av, grid, lanes)
    wide = 1.0 / (prior.outlier_width * prior.outlier_width)
    for j in range(one.n_bands[0]):
        if one.limit[0, j]:
            continue
        band_model(grid, one, ONLY, j, lanes)
        model = min(exp(lanes.flux[0] + ln_omega[0]) * one.inverse_error[0, j], 1e30)
        q = (one.scaled_flux[0, j] - model) ** 2 / (1.0 + lanes.spread2[0] * model * model)
        core = (1.0 - prior.outlier_fraction) * exp(-0.5 * q * (1.0 - wide))
        if core < prior.outlier_fraction / prior.outlier_width:
            return True
    return False


@kernel
def _profile_by_band(one, grid, prior, ln_teff, av_nodes, profile, best_av, best_ln_omega):
    """Log-likelihood, outliers allowed for, at every temperature node: the best of A_V and of each band's own Omega."""
    n = ln_teff.size
    n_bands = one.n_bands[0]
    lanes = make_lanes(n, grid.loading.shape[0])
    av = np.empty(n)
    ln_template = np.empty((n_bands, n))
    spread2 = np.empty((n_bands, n))
    ln_omega = np.empty(n)
    total = np.empty(n)
    product = np.empty(n)
    profile[:] = -np.inf
    for a in range(av_nodes.size):
        av[:] = av_nodes[a] if prior.fit_av else one.av_fixed[0]
        spline_weights(ln_teff, av, grid, lanes)
        for j in range(n_bands):
            band_model(grid, one, ONLY, j, lanes)
            put(lanes.flux, ln_template[j])
            put(lanes.spread2, spread2[j])
        offset = av[0] - one.av_mean[0]
        log_prior = -0.5 * offset * offset * one.av_inverse_variance[0] - av[0] * one.av_rate[0]
        for leader in range(n_bands):
            if one.limit[0, leader] or one.scaled_flux[0, leader] <= 1.0:
                continue
            ln_flux = log(one.scaled_flux[0, leader] / one.inverse_error[0, leader])
            for i in range(n):
                ln_omega[i] = min(max(ln_flux - ln_template[leader, i], prior.ln_omega_min), prior.ln_omega_max)
            total[:] = log_prior
            for j in range(n_bands):
                put(ln_template[j], lanes.flux)
                put(spread2[j], lanes.spread2)
                if not one.limit[0, j]:
                    product[:] = 1.0
                    add_band(lanes, ln_omega, one, ONLY, j, prior, total, product)
                    for i in range(n):
                        total[i] += 0.5 * log(product[i])
            for i in range(n):
                if total[i] > profile[i]:
                    profile[i] = total[i]
                    best_av[i] = av[0]
                    best_ln_omega[i] = ln_omega[i]


@kernel
def one_star(block, star):
    """Return the block of one star, which shares its arrays."""
    rows = slice(star, star + 1)
    return Block(
        block.n_bands[rows],
        block.band[rows],
        block.scaled_flux[rows],
        block.inverse_error[rows],
        block.floor[rows],
        block.limit[rows],
        block.av_mean[rows],
        block.av_inverse_variance[rows],
        block.av_rate[rows],
        block.av_fixed[rows],
        block.factor_scale[rows],
        block.log_norm[rows],
    )


@kernel
def _profile(one, grid, prior, ln_teff, av_nodes, profile, best_av, best_ln_omega):
    """Log-likelihood maximised over Omega (linear least squares) and A_V at every temperature node."""
    n = ln_teff.size
    n_factors = grid.loading.shape[0]
    lanes = make_lanes(n, n_factors)
    lanes_up = make_lanes(n, n_factors)
    av = np.empty(n)
    sum_ff = np.empty(n)
    sum_ft = np.empty(n)
    sum_tt = np.empty(n)
    profile[:] = -np.inf
    for a in range(av_nodes.size):
        av[:] = av_nodes[a] if prior.fit_av else one.av_fixed[0]
        spline_weights(ln_teff, av, grid, lanes)
        spline_weights(ln_teff, av, grid, lanes_up)
        sum_ff[:] = 0.0
        sum_ft[:] = 0.0
        sum_tt[:] = 1e-300
        for j in range(one.n_bands[0]):
            band_model(grid, one, ONLY, j, lanes)
            for k in range(n_factors):
                # Here the factors count as scatter of each band's own: one loading is the change for z = 1.
                lanes_up.z[:] = 0.0
                lanes_up.z[k] = 1.0
                band_model(grid, one, ONLY, j, lanes_up)
                for i in range(n):
                    lanes.spread2[i] += (lanes_up.flux[i] - lanes.flux[i]) ** 2
            observed = 0.0 if one.limit[0, j] else one.scaled_flux[0, j]
            for i in range(n):
                weight = 1.0 / (1.0 + lanes.spread2[i] * observed * observed)
                template = exp(lanes.flux[i]) * one.inverse_error[0, j]
                sum_ff[i] += weight * observed * observed
                sum_ft[i] += weight * observed * template
                sum_tt[i] += weight * template * template
        offset = av[0] - one.av_mean[0]
        log_prior = -0.5 * offset * offset * one.av_inverse_variance[0] - av[0] * one.av_rate[0]
        for i in range(n):
            projected = max(sum_ft[i], 0.0)
            value = -0.5 * (sum_ff[i] - projected * projected / sum_tt[i]) + log_prior
            if value > profile[i]:
                profile[i] = value
                best_av[i] = av[0]
                omega = max(sum_ft[i] / sum_tt[i], 0.1 / np.sqrt(sum_tt[i]))
                best_ln_omega[i] = min(max(np.log(omega), prior.ln_omega_min), prior.ln_omega_max)


@kernel
def _highest_peak(profile):
    """Return the highest node no lower than its neighbours, or -1; visited peaks are NaN."""
    best = -1
    for i in range(profile.size):
        if np.isnan(profile[i]):
            continue
        left = profile[i - 1] if i > 0 else -np.inf
        right = profile[i + 1] if i + 1 < profile.size else -np.inf
        if np.isnan(left) or np.isnan(right):
            continue
        if profile[i] >= left and profile[i] >= right and (best < 0 or profile[i] > profile[best]):
            best = i
    return best


@kernel
def _climb(one, grid, prior, point, here, there):
    """Levenberg-Marquardt with the mixture as reweighting; moves ``point`` and returns its log density.

    What it finds out about the point is left in the first of the two slopes that are returned with it.
    """
    ndim = point.size
    trial = np.empty(ndim)
    best = slopes(one, grid, prior, point, here)
    damping = 1e-3
    for _ in range(40):
        step = solve_positive(damped(here.curvature, damping), here.gradient)
        for k in range(ndim):
            trial[k] = point[k] + step[k]
        clamp(prior, trial)
        value = slopes(one, grid, prior, trial, there)
        if value > best or (best == -np.inf and value > -np.inf):
            gain = value - best
            best = value
            put(trial, point)
            here, there = there, here
            damping = max(damping * 0.2, 1e-9)
            if gain < 1e-4:
                break
        else:
            damping *= 8.0
            if damping > 1e8:
                break
    return best, here, there


@kernel
def damped(curvature, damping):
    """Return a copy of a curvature with its diagonal made larger."""
    out = curvature.copy()
    for k in range(len(out)):
        out[k, k] *= 1.0 + damping
    return out


@kernel
def clamp(prior, point):
    """Pull a point onto the bounds, and a little within those that a density ends at."""
    heat_low = exp(LN_HEAT_K - prior.ln_teff_max) * (1.0 + 1e-9)
    heat_high = exp(LN_HEAT_K - prior.ln_teff_min) * (1.0 - 1e-9)
    point[0] = min(max(point[0], heat_low), heat_high)
    ln_teff = LN_HEAT_K - log(point[0])
    point[1] = min(max(point[1], prior.ln_omega_min + ln_teff + 1e-9), prior.ln_omega_max + ln_teff - 1e-9)
    if prior.fit_av:
        point[2] = min(max(point[2], 0.0), prior.av_max)
    if prior.fit_jitter:
        last = point.size - 1
        point[last] = min(max(point[last], prior.ln_jitter_min + 1e-9), -1e-9)


class Slopes(NamedTuple):
    """What the posterior is like at a point: its gradient (ndim,) and its Gauss-Newton curvature (ndim, ndim).

    The rest is room to find out: a lane for the point, a step in ln T, one in A_V and one in each factor.
    """

    gradient: NDArray[np.float64]
    curvature: NDArray[np.float64]
    jacobian: NDArray[np.float64]
    same: NDArray[np.float64]
    ln_teff: NDArray[np.float64]
    ln_omega: NDArray[np.float64]
    av: NDArray[np.float64]
    lanes: Lanes


@kernel
def make_slopes(ndim, n_factors):
    """Return the buffers for the slopes at a point."""
    n = 3 + n_factors
    return Slopes(
        np.empty(ndim),
        np.empty((ndim, ndim)),
        np.empty(ndim),
        np.empty((n, ndim)),
        np.empty(n),
        np.empty(n),
        np.empty(n),
        make_lanes(n, n_factors),
    )


@kernel
def slopes(one, grid, prior, point, out):
    """Find gradient and curvature of the log density within the bounds, by differences of ln flux; return its value."""
    gradient, curvature, jacobian, lanes = out.gradient, out.curvature, out.jacobian, out.lanes
    ln_teff, av = out.ln_teff, out.av
    ndim = point.size
    n_factors = grid.loading.shape[0]
    first_z = 3 if prior.fit_av else 2
    # Lane 0 is the point; lane 1 a step in ln T, lane 2 in A_V, the others in the factors.
    step_t, step_a = 1e-4, 1e-3
    for i in range(ln_teff.size):
        put(point, out.same[i])
    read_coords(out.same, one.av_fixed[0], prior, ln_teff, out.ln_omega, av, lanes)
    ln_omega = out.ln_omega[0]
    total = one.log_norm[0] + ln_teff[0]
    ln_teff[1] += step_t
    av[2] += step_a
    for k in range(n_factors):
        lanes.z[k, 3 + k] += 1.0
    spline_weights(ln_teff, av, grid, lanes)
    flux = lanes.flux
    jacobian[:] = 0.0
    gradient[:] = 0.0
    curvature[:] = 0.0
    heat_range = exp(LN_HEAT_K - prior.ln_teff_min)
    gradient[0] = -1.0 / point[0]
    curvature[0, 0] = 1.0 / (heat_range * heat_range)
    curvature[1, 1] = 1e-3
    offset = av[0] - one.av_mean[0]
    total -= 0.5 * offset * offset * one.av_inverse_variance[0] + av[0] * one.av_rate[0]
    if prior.fit_av:
        gradient[2] = -offset * one.av_inverse_variance[0] - one.av_rate[0]
        curvature[2, 2] = one.av_inverse_variance[0] + 1e-4 / prior.av_max**2
    for k in range(n_factors):
        total -= 0.5 * point[first_z + k] * point[first_z + k]
        gradient[first_z + k] = -point[first_z + k]
        curvature[first_z + k, first_z + k] = 1.0
    if prior.fit_jitter:
        curvature[ndim - 1, ndim - 1] = 0.25
    f = prior.outlier_fraction
    wide = 1.0 / (prior.outlier_width * prior.outlier_width)
    for j in range(one.n_bands[0]):
        band_model(grid, one, ONLY, j, lanes)
        model = min(exp(flux[0] + ln_omega) * one.inverse_error[0, j], 1e30)
        inverse_variance = 1.0 / (1.0 + lanes.spread2[0] * model * model)
        jacobian[0] = -((flux[1] - flux[0]) / step_t - 1.0) / point[0]
        jacobian[1] = 1.0
        if prior.fit_av:
            jacobian[2] = (flux[2] - flux[0]) / step_a
        for k in range(n_factors):
            jacobian[first_z + k] = flux[3 + k] - flux[0]
        if one.limit[0, j]:
            sigma = 1.0 / np.sqrt(inverse_variance)
            x = (one.scaled_flux[0, j] - model) / sigma
            hazard = np.exp(-0.5 * x * x - HALF_LN_2PI - log_normal_cdf(x)) / sigma
            force = -hazard * model
            total += log_normal_cdf(x)
            weight = max(hazard * (hazard + x / sigma), 0.0)
        else:
            residual = one.scaled_flux[0, j] - model
            weight = inverse_variance
            q = residual * residual * inverse_variance
            if f > 0.0:
                core = (1.0 - f) * exp(-0.5 * q * (1.0 - wide))
                bracket = core + f / prior.outlier_width
                weight *= (core + f * wide / prior.outlier_width) / bracket
                total += log(bracket) - 0.5 * q * wide
            else:
                total -= 0.5 * q
            total += 0.5 * log(inverse_variance)
            # The second part is the variance's, which grows with the model.
            growth = lanes.spread2[0] * model * model * inverse_variance
            force = weight * residual * model + growth * (weight * residual * residual - 1.0)
            if prior.fit_jitter:
                growth = lanes.jitter2[0] * model * model * inverse_variance
                gradient[ndim - 1] += growth * (weight * residual * residual - 1.0)
                curvature[ndim - 1, ndim - 1] += 2.0 * growth * growth
        for k in range(ndim):
            gradient[k] += force * jacobian[k]
            for m in range(ndim):
                curvature[k, m] += weight * model * model * jacobian[k] * jacobian[m]
    return total


@kernel
def solve_positive(matrix, vector):
    """Solve a positive definite system by a Cholesky factor."""
    factor = cholesky(matrix)
    n = vector.size
    x = vector.copy()
    for i in range(n):
        for k in range(i):
            x[i] -= factor[i, k] * x[k]
        x[i] /= factor[i, i]
    for i in range(n - 1, -1, -1):
        for k in range(i + 1, n):
            x[i] -= factor[k, i] * x[k]
        x[i] /= factor[i, i]
    return x


@kernel
def cholesky(matrix):
    """Return the lower Cholesky factor; a pivot that rounding made too small is held up."""
    n = matrix.shape[0]
    factor = np.zeros((n, n))
    for i in range(n):
        for j in range(i + 1):
            total = matrix[i, j]
            for k in range(j):
                total -= factor[i, k] * factor[j, k]
            if i == j:
                factor[i, i] = np.sqrt(max(total, 1e-12 * matrix[i, i] + 1e-300))
            else:
                factor[i, j] = total / factor[j, j]
    return factor


@kernel
def inverse_positive(matrix):
    """Return the inverse of a positive definite matrix."""
    n = matrix.shape[0]
    inverse = np.empty((n, n))
    unit = np.zeros(n)
    for i in range(n):
        unit[:] = 0.0
        unit[i] = 1.0
        column = solve_positive(matrix, unit)
        for k in range(n):
            inverse[k, i] = column[k]
    return inverse


@kernel
def _keep(modes, star, point, value, curvature):
    """Insert a peak in order of height, unless it is one already found or there are enough."""
    count = modes.n_modes[star]
    for m in range(count):
        if abs(np.log(point[0] / modes.coords[star, m, 0])) < 0.01:
            if value <= modes.log_density[star, m]:
                return
            for k in range(m, count - 1):
                _copy_mode(modes, star, k + 1, k)
            count -= 1
            break
    place = count
    for m in range(count):
        if value > modes.log_density[star, m]:
            place = m
            break
    if place >= MAX_MODES:
        return
    for m in range(min(count, MAX_MODES - 1), place, -1):
        _copy_mode(modes, star, m - 1, m)
    put(point, modes.coords[star, place])
    modes.log_density[star, place] = value
    covariance = inverse_positive(curvature)
    for k in range(point.size):
        put(covariance[k], modes.covariance[star, place, k])
    modes.n_modes[star] = min(count + 1, MAX_MODES)


@kernel
def _copy_mode(modes, star, source, target):
    put(modes.coords[star, source], modes.coords[star, target])
    modes.log_density[star, target] = modes.log_density[star, source]
    for k in range(modes.coords.shape[2]):
        put(modes.covariance[star, source, k], modes.covariance[star, target, k])

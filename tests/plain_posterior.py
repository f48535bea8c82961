"""The posterior written a second time, plainly in numpy and scipy, and integrated on a fine grid."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline
from scipy.special import log_ndtr, logsumexp
from scipy.stats import expon, norm

from starkiln.physics.bandtable import ln_flux
from starkiln.settings import Settings
from starkiln.stages.model import FitModel
from starkiln.stages.stars import Stars

PROBABILITIES = (0.025, 0.16, 0.5, 0.84, 0.975)


def log_posterior(
    ln_teff: NDArray[np.float64],
    ln_omega: NDArray[np.float64],
    av: NDArray[np.float64],
    stars: Stars,
    star: int,
    model: FitModel,
    settings: Settings,
    z: NDArray[np.float64] | None = None,
    ln_jitter: NDArray[np.float64] | None = None,
    factor_scale: float = 1.0,
) -> NDArray[np.float64]:
    """Return the log density in (ln T, ln Omega, A_V, z, ln jitter) at N points; z is (K, N).

    The densities of A_V, of z and of the data are normalised, but for the cut of A_V at its bounds.
    """
    prior = model.prior
    inside = (
        (ln_teff >= prior.ln_teff_min)
        & (ln_teff <= prior.ln_teff_max)
        & (ln_omega >= prior.ln_omega_min)
        & (ln_omega <= prior.ln_omega_max)
        & (av >= 0.0)
        & (av <= prior.av_max)
    )
    jitter = np.zeros_like(ln_teff)
    if ln_jitter is not None:
        inside &= (ln_jitter >= prior.ln_jitter_min) & (ln_jitter <= 0.0)
        jitter = np.exp(ln_jitter)
    total = np.where(inside, _log_av_prior(av, stars, star, settings), -np.inf)
    ln_teff = np.clip(ln_teff, prior.ln_teff_min, prior.ln_teff_max)
    ln_model = ln_flux(model.table, np.exp(ln_teff), np.clip(av, 0.0, prior.av_max)) + ln_omega[:, None]
    for values, loading in zip(() if z is None else z, model.grid.loading, strict=True):
        total = total + norm.logpdf(values)
        ln_model = ln_model + factor_scale * (on_grid(loading, model, ln_teff) * values).T
    flux = np.exp(ln_model)
    scatter = factor_scale * on_grid(model.grid.scatter, model, ln_teff)
    outliers = settings.model.outliers
    for band in np.flatnonzero(stars.usable[star]):
        observed, error = stars.flux_jy[star, band], stars.error_jy[star, band]
        share2 = model.floor[band] ** 2 + scatter[band] ** 2 + jitter**2
        sigma = np.sqrt(error**2 + share2 * flux[:, band] ** 2)
        if stars.limit[star, band]:
            total = total + log_ndtr((observed - flux[:, band]) / sigma)
            continue
        near = norm.logpdf(observed, flux[:, band], sigma)
        if outliers:
            far = norm.logpdf(observed, flux[:, band], outliers.width * sigma)
            near = np.logaddexp(np.log1p(-outliers.fraction) + near, np.log(outliers.fraction) + far)
        total = total + near
    return total


def _log_av_prior(av: NDArray[np.float64], stars: Stars, star: int, settings: Settings) -> NDArray[np.float64] | float:
    scale = stars.av_scale[star]
    match settings.model.extinction.prior:
        case "half-normal":
            return norm.logpdf(av, 0.0, scale)
        case "gaussian":
            return norm.logpdf(av, stars.av_mean[star], scale)
        case "exponential":
            return expon.logpdf(np.maximum(av, 0.0), 0.0, scale)
        case _:
            return 0.0


def on_grid(coefficients: NDArray[np.float64], model: FitModel, ln_teff: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return (B, N) what B-spline coefficients (B, rows) on the temperature grid say."""
    grid = model.grid
    knots = grid.ln_teff_min + grid.ln_teff_step * (np.arange(coefficients.shape[1] + 4) - 3.0)
    return BSpline(knots, coefficients.T, 3)(ln_teff).T


def integrate(
    stars: Stars, star: int, model: FitModel, settings: Settings, draws: NDArray[np.float64], nodes: int = 56
) -> NDArray[np.float64]:
    """Return quantiles (3, 5) of ln T, ln Omega and A_V by summing over a grid.

    The grid is straight in A_V and, at each A_V, along the principal axes of the other two about their regression
    on it, which keeps every step a fraction of the conditional width; ``draws`` (3, N) only say where to look.
    """
    mean, covariance = draws.mean(axis=1), np.cov(draws)
    slope = covariance[:2, 2] / covariance[2, 2]
    conditional = np.linalg.cholesky(covariance[:2, :2] - np.outer(slope, covariance[2, :2]))
    spread = np.sqrt(covariance[2, 2])
    low, high = max(mean[2] - 8.0 * spread, 0.0), min(mean[2] + 9.0 * spread, model.prior.av_max)
    step = (high - low) / nodes
    av = low + step * (np.arange(nodes) + 0.5)
    unit = np.linspace(-8.0, 8.0, nodes)
    a, u, v = np.meshgrid(av, unit, unit, indexing="ij")
    ln_teff = mean[0] + slope[0] * (a - mean[2]) + conditional[0, 0] * u
    ln_omega = mean[1] + slope[1] * (a - mean[2]) + conditional[1, 0] * u + conditional[1, 1] * v
    points = [ln_teff.ravel(), ln_omega.ravel(), a.ravel()]
    log_density = log_posterior(*points, stars, star, model, settings)
    weight = np.exp(log_density - log_density.max())
    return np.array(
        [weighted_quantiles(values, weight) for values in points[:2]] + [cell_quantiles(points[2], weight, step)]
    )


def log_evidence(
    stars: Stars, star: int, model: FitModel, settings: Settings, draws: NDArray[np.float64], nodes: int = 24
) -> float:
    """Return ln of the integral of :func:`log_posterior` over ln T, ln Omega, A_V if fitted, and z, by a grid.

    The grid is straight in A_V and follows the draws' covariance in the others; ``draws`` (P, N) only say where to
    look.
    """
    fit_av, n_factors = model.prior.fit_av, len(model.grid.loading)
    order = [2, 0, 1, 3][: 3 + n_factors] if fit_av else list(range(2 + n_factors))
    mean, lower = draws[order].mean(axis=1), np.linalg.cholesky(np.cov(draws[order]))
    unit = [np.linspace(-8.0, 8.0, nodes) for _ in order]
    if fit_av:
        low = max(-mean[0] / lower[0, 0], -8.0)
        high = min((model.prior.av_max - mean[0]) / lower[0, 0], 9.0)
        unit[0] = low + (high - low) * (np.arange(nodes) + 0.5) / nodes
    points = np.stack([axis.ravel() for axis in np.meshgrid(*unit, indexing="ij")])
    values = (mean[:, None] + lower @ points)[np.argsort(order)]
    av = values[2] if fit_av else np.full(points.shape[1], stars.av_mean[star])
    z = values[len(values) - n_factors :]
    log_density = log_posterior(values[0], values[1], av, stars, star, model, settings, z)
    cell = np.prod([axis[1] - axis[0] for axis in unit]) * np.prod(np.diag(lower))
    return float(logsumexp(log_density) + np.log(cell))


def weighted_quantiles(values: NDArray[np.float64], weight: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return quantiles of many weighted points."""
    order = np.argsort(values)
    mass = np.cumsum(weight[order]) - 0.5 * weight[order]
    return np.interp(PROBABILITIES, mass / weight.sum(), values[order])


def cell_quantiles(values: NDArray[np.float64], weight: NDArray[np.float64], width: float) -> NDArray[np.float64]:
    """Return quantiles of values that sit at the middles of cells, the mass spread evenly in each."""
    middles, place = np.unique(values, return_inverse=True)
    mass = np.concatenate([[0.0], np.cumsum(np.bincount(place, weight))])
    edges = np.concatenate([middles - 0.5 * width, [middles[-1] + 0.5 * width]])
    return np.interp(PROBABILITIES, mass / mass[-1], edges)

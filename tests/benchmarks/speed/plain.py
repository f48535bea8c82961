"""The log-posterior written twice more: for one position in NumPy, as a user of emcee would, and in JAX.

Both read the band table that the kernel reads, and the benchmark fails where they differ from the kernel by more than
a billionth. They know neither upper limits nor a fixed A_V.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.ensemble import log_prob_function
from starkiln.inference.posterior import HEAT_K, Block, Grid, Prior

FloatArray = NDArray[np.float64]
TOLERANCE = 1e-9
LN_2PI = float(np.log(2.0 * np.pi))


class Disagreement(RuntimeError):
    """A log-posterior is not the kernel's."""


class PlainPosterior:
    """The log-posterior of one star at one position: 1e4 K / T, ln(Omega T), A_V, z."""

    def __init__(self, block: Block, star: int, grid: Grid, prior: Prior) -> None:
        refuse_unknown(block, prior)
        used = slice(0, block.n_bands[star])
        self.band = block.band[star, used]
        self.error_jy = 1.0 / block.inverse_error[star, used]
        self.flux_jy = block.scaled_flux[star, used] * self.error_jy
        self.floor = block.floor[star, used]
        self.scale = block.factor_scale[star]
        self.av_prior = block.av_mean[star], block.av_inverse_variance[star], block.av_rate[star]
        self.grid, self.prior = grid, prior
        self.coef = grid.coef.reshape(-1, grid.n_rows, grid.n_columns)[self.band]
        self.loading, self.scatter = grid.loading[:, self.band], grid.scatter[self.band]

    def __call__(self, position: FloatArray) -> float:
        """Return the log density, minus infinity outside the bounds."""
        prior, (heat, glow, av), z = self.prior, position[:3], position[3:]
        if heat <= 0.0:
            return -np.inf
        ln_teff = np.log(HEAT_K / heat)
        ln_omega = glow - ln_teff
        if not (
            prior.ln_teff_min <= ln_teff <= prior.ln_teff_max
            and prior.ln_omega_min <= ln_omega <= prior.ln_omega_max
            and 0.0 <= av <= prior.av_max
        ):
            return -np.inf
        mean, inverse_variance, rate = self.av_prior
        ln_prior = ln_teff - 0.5 * (av - mean) ** 2 * inverse_variance - rate * av - 0.5 * np.sum(z * z)
        return float(ln_prior + self.ln_likelihood(ln_teff, ln_omega, av, z))

    def ln_likelihood(self, ln_teff: float, ln_omega: float, av: float, z: FloatArray) -> float:
        grid, prior = self.grid, self.prior
        row, row_weight = b_spline((ln_teff - grid.ln_teff_min) / grid.ln_teff_step, grid.n_rows)
        column, column_weight = b_spline(av / grid.av_step, grid.n_columns)
        ln_flux = self.coef[:, row : row + 4, column : column + 4] @ column_weight @ row_weight
        ln_flux = ln_flux + self.scale * z @ (self.loading[:, :, row : row + 4] @ row_weight)
        scatter = self.scale * (self.scatter[:, row : row + 4] @ row_weight)
        model_jy = np.exp(ln_flux + ln_omega)
        variance = self.error_jy**2 + (self.floor**2 + scatter**2) * model_jy**2
        chi2 = (self.flux_jy - model_jy) ** 2 / variance
        terms = -0.5 * (chi2 + np.log(variance) + LN_2PI)
        if prior.outlier_fraction > 0.0:
            wide = -0.5 * (chi2 / prior.outlier_width**2 + np.log(variance) + LN_2PI)
            far = np.log(prior.outlier_fraction / prior.outlier_width) + wide
            terms = np.logaddexp(np.log1p(-prior.outlier_fraction) + terms, far)
        return float(np.sum(terms))


def refuse_unknown(block: Block, prior: Prior) -> None:
    """Raise where a star has what the plain posteriors do not know."""
    if block.limit.any() or not prior.fit_av or prior.fit_jitter:
        raise NotImplementedError("upper limits, a fixed A_V and jitter are not in the plain log-posteriors")


def b_spline(place: float, n_coefficients: int) -> tuple[int, FloatArray]:
    """Return the first coefficient and the four weights of a uniform cubic B-spline, ``place`` in steps."""
    first = min(int(place), n_coefficients - 4)
    t = place - first
    return first, np.array([(1 - t) ** 3, 3 * t**3 - 6 * t**2 + 4, -3 * t**3 + 3 * t**2 + 3 * t + 1, t**3]) / 6.0


class StarData(NamedTuple):
    """The block as JAX maps over it: one row a star, bands beyond a star's own masked."""

    used: Any
    band: Any
    scaled_flux: Any
    inverse_error: Any
    floor: Any
    scale: Any
    log_norm: Any
    av_mean: Any
    av_inverse_variance: Any
    av_rate: Any

    @classmethod
    def of(cls, block: Block) -> StarData:
        used = np.arange(block.band.shape[1]) < block.n_bands[:, None]
        return cls(
            used,
            block.band,
            block.scaled_flux,
            block.inverse_error,
            block.floor,
            block.factor_scale,
            block.log_norm,
            block.av_mean,
            block.av_inverse_variance,
            block.av_rate,
        )


def jax_log_density(grid: Grid, prior: Prior) -> Callable[[Any, StarData], Any]:
    """Return the log density of one star in (ln T, ln Omega, A_V, z), of positions inside the bounds, for JAX."""
    import jax.numpy as jnp

    coef = jnp.asarray(grid.coef.reshape(-1, grid.n_rows, grid.n_columns))
    loading, scatter = jnp.asarray(grid.loading), jnp.asarray(grid.scatter)
    four = jnp.arange(4)

    def weights(place: Any, n_coefficients: int) -> tuple[Any, Any]:
        first = jnp.clip(jnp.floor(place), 0, n_coefficients - 4)
        t = place - first
        cubic = jnp.stack([(1 - t) ** 3, 3 * t**3 - 6 * t**2 + 4, -3 * t**3 + 3 * t**2 + 3 * t + 1, t**3])
        return first.astype(int), cubic / 6.0

    def log_density(theta: Any, star: StarData) -> Any:
        ln_teff, ln_omega, av, z = theta[0], theta[1], theta[2], theta[3:]
        row, row_weight = weights((ln_teff - grid.ln_teff_min) / grid.ln_teff_step, grid.n_rows)
        column, column_weight = weights(av / grid.av_step, grid.n_columns)
        rows, columns = row + four, column + four
        cells = coef[star.band[:, None, None], rows[None, :, None], columns[None, None, :]]
        ln_flux = cells @ column_weight @ row_weight
        at_row = star.band[:, None], rows[None, :]
        for k in range(len(grid.loading)):
            ln_flux = ln_flux + star.scale * z[k] * (loading[k][at_row] @ row_weight)
        spread = star.scale * (scatter[at_row] @ row_weight)
        model = jnp.exp(ln_flux + ln_omega) * star.inverse_error
        inverse_variance = 1.0 / (1.0 + (star.floor**2 + spread**2) * model**2)
        chi2 = (star.scaled_flux - model) ** 2 * inverse_variance
        terms = -0.5 * chi2
        if prior.outlier_fraction > 0.0:
            near = jnp.log1p(-prior.outlier_fraction) - 0.5 * chi2
            far = jnp.log(prior.outlier_fraction / prior.outlier_width) - 0.5 * chi2 / prior.outlier_width**2
            terms = jnp.logaddexp(near, far)
        terms = jnp.where(star.used, terms + 0.5 * jnp.log(inverse_variance), 0.0)
        offset = av - star.av_mean
        ln_av = -0.5 * offset**2 * star.av_inverse_variance - av * star.av_rate
        return star.log_norm + ln_av - 0.5 * jnp.sum(z * z) + jnp.sum(terms)

    return log_density


def bounds(prior: Prior) -> tuple[FloatArray, FloatArray]:
    """Return the low and the high ends of ln T, ln Omega and A_V."""
    low = np.array([prior.ln_teff_min, prior.ln_omega_min, 0.0])
    return low, np.array([prior.ln_teff_max, prior.ln_omega_max, prior.av_max])


def free(theta: FloatArray, prior: Prior) -> FloatArray:
    """Return unconstrained coordinates: logits of where ln T and ln Omega stand between their bounds, A_V's, and z.

    Posteriors pile up at an A_V of none, where a logit would draw them out into a tail. A_V is instead the highest one
    times ``|tanh(v / 2)|``: as good as straight in v, and mirrored at zero without a step of the density.
    """
    low, high = bounds(prior)
    share = (theta[..., :3] - low) / (high - low)
    share[..., 2] = 0.5 * (1.0 + share[..., 2])
    return np.concatenate([np.log(share) - np.log1p(-share), theta[..., 3:]], axis=-1)


def jax_free_log_density(grid: Grid, prior: Prior) -> Callable[[Any, StarData], tuple[Any, Any, Any]]:
    """Return, for JAX, the map of unconstrained coordinates to (log density in them, position, log Jacobian)."""
    import jax
    import jax.numpy as jnp

    log_density = jax_log_density(grid, prior)
    low, high = (jnp.asarray(edge) for edge in bounds(prior))

    def of_free(point: Any, star: StarData) -> tuple[Any, Any, Any]:
        share = jax.nn.sigmoid(point[:3]).at[2].set(jnp.abs(jnp.tanh(0.5 * point[2])))
        theta = jnp.concatenate([low + (high - low) * share, point[3:]])
        width = (high - low) * jnp.array([1.0, 1.0, 2.0])
        steps = jnp.log(width) + jax.nn.log_sigmoid(point[:3]) + jax.nn.log_sigmoid(-point[:3])
        return log_density(theta, star) + jnp.sum(steps), theta, jnp.sum(steps)

    return of_free


def natural(coords: FloatArray) -> FloatArray:
    """Return (..., ndim) positions of walkers as ln T, ln Omega, A_V, z."""
    ln_teff = np.log(HEAT_K) - np.log(coords[..., 0])
    return np.concatenate([np.stack([ln_teff, coords[..., 1] - ln_teff], axis=-1), coords[..., 2:]], axis=-1)


def check_plain(points: FloatArray, block: Block, grid: Grid, prior: Prior) -> float:
    """Return by how much NumPy and kernel differ at positions (S, n, ndim) of walkers, at most.

    Raises
    ------
    Disagreement
        If they differ by more than the tolerance, or one of them only is minus infinity.
    """
    kernel = log_prob_function(block, grid, prior)(points.reshape(-1, points.shape[-1])).reshape(points.shape[:2])
    posteriors = [PlainPosterior(block, star, grid, prior) for star in range(len(points))]
    plain = np.array([[one(point) for point in some] for one, some in zip(posteriors, points, strict=True)])
    return worst_difference(plain, kernel, "NumPy")


def check_jax(points: FloatArray, block: Block, grid: Grid, prior: Prior) -> float:
    """Return by how much JAX and kernel differ at positions (S, n, ndim) of walkers inside the bounds, at most.

    The Jacobian is checked against JAX's own derivative of the map.

    Raises
    ------
    Disagreement
        If they differ by more than the tolerance.
    """
    import jax
    import jax.numpy as jnp

    of_free = jax_free_log_density(grid, prior)
    theta = natural(points)
    unbound = free(theta, prior)
    per_star = jax.vmap(jax.vmap(of_free, (0, None)))
    value, _, log_jacobian = per_star(jnp.asarray(unbound), StarData.of(block))
    derivative = jax.vmap(jax.jacfwd(lambda point, star: of_free(point, star)[1]))(
        jnp.asarray(unbound[:, 0]), StarData.of(block)
    )
    _, log_det = np.linalg.slogdet(np.asarray(derivative))
    worst_difference(np.asarray(log_jacobian)[:, 0], log_det, "the Jacobian in JAX")
    kernel = log_prob_function(block, grid, prior)(points.reshape(-1, points.shape[-1])).reshape(points.shape[:2])
    return worst_difference(np.asarray(value - log_jacobian), kernel - theta[..., 0], "JAX")


def worst_difference(ours: FloatArray, kernel: FloatArray, name: str) -> float:
    """Return the largest difference, relative where values are large; raise where it is too large."""
    if not np.array_equal(np.isfinite(ours), np.isfinite(kernel)):
        raise Disagreement(f"{name} and the kernel differ in what is outside the bounds")
    finite = np.isfinite(kernel)
    ours, kernel = ours[finite], kernel[finite]
    worst = float(np.max(np.abs(ours - kernel) / np.maximum(1.0, np.abs(kernel)), initial=0.0))
    if not worst <= TOLERANCE:
        raise Disagreement(f"{name} and the kernel differ by {worst:.3g}, more than {TOLERANCE}")
    return worst

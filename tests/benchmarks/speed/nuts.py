"""NUTS with window adaptation of blackjax on JAX, vectorised over the stars, on the CPU."""

from __future__ import annotations

from dataclasses import dataclass
from importlib.util import find_spec
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from benchmarks.speed.common import Clock
from benchmarks.speed.plain import StarData, bounds, check_jax, free, jax_free_log_density, refuse_unknown
from benchmarks.speed.plain import natural as natural_of
from starkiln.inference.posterior import Block, Grid, Prior

NAME = "blackjax NUTS"
MISSING = "blackjax is not installed; python3 -m pip install -c requirements.lock -e '.[bench]' brings it"
CHAINS = 2
WARM_UP = 400
STEPS = 1_000


@dataclass
class Sampled:
    """Chains (P, chains, steps) of each star, and the CPU seconds of each part of the work."""

    chains: list[NDArray[np.float64]]
    start_s: float
    warm_up_s: float
    sampling_s: float
    compile_s: float


def is_installed() -> bool:
    """Return whether blackjax and JAX are there."""
    return find_spec("blackjax") is not None and find_spec("jax") is not None


def check(points: NDArray[np.float64], block: Block, grid: Grid, prior: Prior) -> float:
    """Return by how much the log-posterior in JAX differs from the kernel; raises where that is too much."""
    _use_doubles()
    return check_jax(points, block, grid, prior)


def sample(walkers: NDArray[np.float64], block: Block, grid: Grid, prior: Prior) -> Sampled:
    """Sample the stars of a block.

    Positions are unconstrained and straightened by the walkers, see :class:`Frame`, so that the adaptation starts from
    the same Laplace fit as emcee's own chains.

    Parameters
    ----------
    walkers
        (S, n, ndim) draws of each star's Laplace fit; chains start from the first of them.
    """
    import jax

    _use_doubles()
    refuse_unknown(block, prior)
    clock = Clock()
    frame = Frame.of(free(_off_the_bounds(natural_of(walkers), prior), prior), prior)
    keys = jax.random.split(jax.random.key(1), (2, len(walkers), CHAINS))
    stars = frame, StarData.of(block)
    start_s = clock.lap()
    adapt, draw = _steps(grid, prior)
    adapting = jax.jit(adapt).lower(keys[0], frame.begin, stars).compile()
    shapes = jax.eval_shape(adapt, keys[0], frame.begin, stars)
    drawing = jax.jit(draw).lower(keys[1], *shapes, stars).compile()
    compile_s = clock.lap()
    adapted = jax.block_until_ready(adapting(keys[0], frame.begin, stars))
    warm_up_s = clock.lap()
    theta = np.asarray(jax.block_until_ready(drawing(keys[1], *adapted, stars)))
    sampling_s = clock.lap()
    return Sampled(list(theta.transpose(0, 3, 1, 2)), start_s, warm_up_s, sampling_s, compile_s)


def _use_doubles() -> None:
    import jax

    jax.config.update("jax_enable_x64", True)
    jax.config.update("jax_platforms", "cpu")


def _off_the_bounds(theta: NDArray[np.float64], prior: Prior) -> NDArray[np.float64]:
    # A chain that starts at a bound has an infinite coordinate.
    low, high = bounds(prior)
    margin = 1e-3 * (high - low)
    inside = np.clip(theta[..., :3], low + margin, high - margin)
    return np.concatenate([inside, theta[..., 3:]], axis=-1)


class Frame(NamedTuple):
    """Coordinates of S stars in which a posterior is nearly round: those of A_V, and the others less their slope in it.

    The ridge of temperature against dust is straight in A_V itself, which is mirrored at none in the free coordinates.

    Attributes
    ----------
    begin
        (S, CHAINS, ndim) where chains start.
    centre, slope, factor
        (S, ndim - 1), the same, and (S, ndim - 1, ndim - 1): mean of the others at the mean A_V, their change with
        A_V, and the Cholesky factor of what is left.
    av
        (S, 3): mean A_V, mean and scale of its coordinate.
    """

    begin: Any
    centre: Any
    slope: Any
    factor: Any
    av: Any

    @classmethod
    def of(cls, unbound: NDArray[np.float64], prior: Prior) -> Frame:
        """Return the frame of walkers (S, n, ndim) in unconstrained coordinates."""
        dust, others = unbound[..., 2], np.delete(unbound, 2, axis=-1)
        av = prior.av_max * np.abs(np.tanh(0.5 * dust))
        mean, centre = av.mean(axis=1), others.mean(axis=1)
        offset = av - mean[:, None]
        slope = (offset[..., None] * others).sum(axis=1) / (offset**2).sum(axis=1)[:, None]
        left = others - centre[:, None] - offset[..., None] * slope[:, None]
        factor = np.stack([np.linalg.cholesky(np.cov(star.T)) for star in left])
        white = np.stack([np.linalg.solve(f, star.T).T for f, star in zip(factor, left, strict=True)])
        middle, scale = dust.mean(axis=1), dust.std(axis=1)
        white = np.insert(white, 2, (dust - middle[:, None]) / scale[:, None], axis=-1)
        return cls(white[:, :CHAINS], centre, slope, factor, np.stack([mean, middle, scale], axis=1))


def unbent(white: Any, frame: Frame, prior: Prior) -> Any:
    """Return the unconstrained coordinates of a position in the frame of a star, for JAX; the Jacobian is constant."""
    import jax.numpy as jnp

    mean, middle, scale = frame.av
    dust = middle + scale * white[2]
    av = prior.av_max * jnp.abs(jnp.tanh(0.5 * dust))
    others = frame.centre + frame.slope * (av - mean) + frame.factor @ jnp.delete(white, 2)
    return jnp.concatenate([others[:2], dust[None], others[2:]])


def _steps(grid: Grid, prior: Prior) -> tuple[Any, Any]:
    """Return functions over (stars, chains): one that adapts, and one that draws (S, chains, steps, ndim)."""
    import blackjax
    import jax
    from blackjax.adaptation.base import get_filter_adapt_info_fn

    of_free = jax_free_log_density(grid, prior)

    def log_density_of(star: Any) -> Any:
        frame, data = star
        return lambda white: of_free(unbent(white, frame, prior), data)[0]

    def adapt(key: Any, begin: Any, star: Any) -> Any:
        warm_up = blackjax.window_adaptation(
            blackjax.nuts,
            log_density_of(star),
            is_mass_matrix_diagonal=False,
            adaptation_info_fn=get_filter_adapt_info_fn(),
        )
        (state, found), _ = warm_up.run(key, begin, num_steps=WARM_UP)
        return state, found["step_size"], found["inverse_mass_matrix"]

    def draw(key: Any, state: Any, step_size: Any, inverse_mass_matrix: Any, star: Any) -> Any:
        frame, data = star
        kernel = blackjax.nuts(log_density_of(star), step_size, inverse_mass_matrix)

        def step(state: Any, key: Any) -> tuple[Any, Any]:
            state, _ = kernel.step(key, state)
            return state, state.position

        _, white = jax.lax.scan(step, state, jax.random.split(key, STEPS))
        return jax.vmap(lambda point: of_free(unbent(point, frame, prior), data)[1])(white)

    over_chains = jax.vmap(adapt, (0, 0, None)), jax.vmap(draw, (0, 0, 0, 0, None))
    return tuple(jax.vmap(function) for function in over_chains)

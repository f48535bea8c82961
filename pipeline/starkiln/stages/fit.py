"""From stars to posterior draws, a block at a time."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import HALF_LN_2PI, log_array
from starkiln.inference.ensemble import PATIENCE, Draws, Start, Stopping, chain_bytes, sample_blocks
from starkiln.inference.posterior import LN_HEAT_K, Block
from starkiln.inference.start import Modes, find_modes
from starkiln.inference.streams import star_streams
from starkiln.settings import Settings
from starkiln.stages.model import LN_RSUN_PC, FitModel
from starkiln.stages.stars import Stars

MEMORY_SHARE = 0.3  # of a worker's memory that a block's chains may take
LARGEST_BLOCK = 256


@dataclass(frozen=True)
class Fitted:
    """Stars that have been sampled together and finished together.

    Attributes
    ----------
    block
        The data of the finished stars, in the order of ``draws``, whose ``stars`` are their places among all.
    """

    block: Block
    draws: Draws


def block_stars(settings: Settings) -> int:
    """Return how many stars to sample together, by the memory of a worker."""
    one = chain_bytes(PATIENCE, settings.sampling.walkers, 4)
    return int(np.clip(MEMORY_SHARE * settings.compute.memory_per_worker_bytes / one, 1, LARGEST_BLOCK))


def fit(stars: Stars, model: FitModel, settings: Settings) -> Iterator[Fitted]:
    """Sample every star, yielding those that finish together."""
    stopping = Stopping(settings.sampling.effective_samples, settings.sampling.max_steps)
    memory_bytes = MEMORY_SHARE * settings.compute.memory_per_worker_bytes
    starts = _starts(stars, model, settings)
    for block, draws in sample_blocks(
        starts, model.grid, model.prior, settings.sampling.walkers, stopping, memory_bytes
    ):
        yield Fitted(block, draws)


def _starts(stars: Stars, model: FitModel, settings: Settings) -> Iterator[Start]:
    size = block_stars(settings)
    for first in range(0, len(stars), size):
        some = stars.take(slice(first, first + size))
        block, modes = start_block(some, model, settings)
        yield Start(block, modes, star_streams(some.ids, settings.run.seed, b"photometry"))


def start_block(stars: Stars, model: FitModel, settings: Settings) -> tuple[Block, Modes]:
    """Return the block of some stars and the peaks of their posteriors; giants get wider factors."""
    block = pack_block(stars, model, settings)
    modes = find_modes(block, model.grid, model.prior)
    if model.departures is not None:
        scale = factor_scale(stars, modes)
        giants = np.flatnonzero(scale > 1.0)
        if len(giants):
            block = block._replace(factor_scale=scale)
            for mine, theirs in zip(modes, find_modes(block.take(giants), model.grid, model.prior), strict=True):
                mine[giants] = theirs
    return block, modes


def factor_scale(stars: Stars, modes: Modes) -> NDArray[np.float64]:
    """Return by how much the factors and the scatter of dwarfs are widened for each star: twice for cool giants.

    A giant is a star above 2.5 solar radii below 7000 K; the step is drawn out from 2 to 3 radii and from 7500 to
    6500 K. The radius is that of the first peak at the distance itself, which must be known to a third: without it a
    star counts as a dwarf.
    """
    ln_teff = LN_HEAT_K - log_array(modes.coords[:, 0, 0])
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        parallax_pc = np.where(stars.parallax_mas > 3.0 * stars.parallax_error_mas, 1e3 / stars.parallax_mas, np.nan)
        distance_pc = np.where(stars.distance_pc > 3.0 * stars.distance_error_pc, stars.distance_pc, parallax_pc)
        ln_radius = np.log(distance_pc) + 0.5 * (modes.coords[:, 0, 1] - ln_teff) - LN_RSUN_PC
    return giant_scale(np.exp(ln_teff), np.nan_to_num(np.exp(np.minimum(ln_radius, 5.0)), nan=0.0))


def giant_scale(teff_k: NDArray[np.float64], radius_rsun: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return how much wider than a dwarf's the factors of a star of this temperature and radius are: 1 to 2."""
    large = np.clip(radius_rsun - 2.0, 0.0, 1.0)
    cool = np.clip((7500.0 - teff_k) / 1000.0, 0.0, 1.0)
    return np.asarray(1.0 + large * cool)


def pack_block(stars: Stars, model: FitModel, settings: Settings) -> Block:
    """Arrange stars as the kernels read them: each star's usable bands first, fluxes in units of their errors."""
    order = np.argsort(~stars.usable, axis=1, kind="stable")

    def packed(values: np.ndarray) -> np.ndarray:
        return np.ascontiguousarray(np.take_along_axis(values, order, axis=1))

    error_jy, limit, usable = packed(stars.error_jy), packed(stars.limit), packed(stars.usable)
    measured = usable & ~limit
    prior = settings.model.extinction.prior
    inverse_variance, rate = np.zeros(len(stars)), np.zeros(len(stars))
    if prior in ("half-normal", "gaussian"):
        inverse_variance = stars.av_scale**-2.0
    elif prior == "exponential":
        rate = 1.0 / stars.av_scale
    terms = np.where(measured, -log_array(error_jy) - HALF_LN_2PI, 0.0)
    log_norm = np.zeros(len(stars))
    for column in terms.T:
        log_norm += column
    return Block(
        n_bands=usable.sum(axis=1),
        band=order,
        scaled_flux=packed(stars.flux_jy) / error_jy,
        inverse_error=1.0 / error_jy,
        floor=model.floor[order],
        limit=limit,
        av_mean=stars.av_mean,
        av_inverse_variance=inverse_variance,
        av_rate=rate,
        av_fixed=stars.av_mean,
        factor_scale=np.ones(len(stars)),
        log_norm=log_norm,
    )

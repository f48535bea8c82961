"""From stars to posterior draws, a block at a time."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from starkiln.inference.arithmetic import log_array
from starkiln.inference.ensemble import Draws, Stopping, chain_bytes, sample_block
from starkiln.inference.posterior import HALF_LN_2PI, Block
from starkiln.inference.streams import star_streams
from starkiln.settings import Settings
from starkiln.stages.model import FitModel
from starkiln.stages.stars import Stars

MEMORY_SHARE = 0.3  # of a worker's memory that a block's chains may take
TYPICAL_STEPS = 256
LARGEST_BLOCK = 256


@dataclass(frozen=True)
class Fitted:
    """Stars that have been sampled together and finished together.

    Attributes
    ----------
    first
        Row of the block's first star; ``draws.stars`` counts from it.
    block
        The data of the finished stars, in the order of ``draws``.
    """

    first: int
    block: Block
    draws: Draws


def block_stars(settings: Settings) -> int:
    """Return how many stars to sample together, by the memory of a worker."""
    one = chain_bytes(TYPICAL_STEPS, settings.sampling.walkers, 3)
    return int(np.clip(MEMORY_SHARE * settings.compute.memory_per_worker_bytes / one, 1, LARGEST_BLOCK))


def fit(stars: Stars, model: FitModel, settings: Settings) -> Iterator[Fitted]:
    """Sample every star, yielding those of a block that finish together."""
    stopping = Stopping(settings.sampling.effective_samples, settings.sampling.max_steps)
    size = block_stars(settings)
    memory_bytes = MEMORY_SHARE * settings.compute.memory_per_worker_bytes
    for first in range(0, len(stars), size):
        some = stars.take(slice(first, first + size))
        block = pack_block(some, model, settings)
        streams = star_streams(some.ids, settings.run.seed, b"photometry")
        for draws in sample_block(
            block, model.grid, model.prior, streams, settings.sampling.walkers, stopping, memory_bytes
        ):
            yield Fitted(first, block.take(draws.stars), draws)


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

"""The evidence of a model for each star, by importance sampling from the proposal that its burn-in has learnt."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import HALF_LN_2PI
from starkiln.inference.compile import kernel
from starkiln.inference.ensemble import Start, burn_in, log_prob_function
from starkiln.inference.posterior import Block, Grid, Prior
from starkiln.inference.proposal import (
    Proposal,
    draw_independent,
    log_normalisation,
    log_proposal_density,
    make_scratch,
)
from starkiln.inference.start import Modes


class WeightedDraws(NamedTuple):
    """Independent draws of each star's posterior with their weights.

    Attributes
    ----------
    coords
        (S, N, ndim), in the walkers' coordinates.
    log_weight
        (S, N): posterior density, factors' priors normalised, over the density drawn from; its mean is the evidence
        up to the constants that models of one set of priors share.
    """

    coords: NDArray[np.float64]
    log_weight: NDArray[np.float64]


def importance_draws(
    block: Block,
    grid: Grid,
    prior: Prior,
    streams: NDArray[np.uint64],
    walkers: int,
    modes: Modes,
    proposal: Proposal | None = None,
    n_draws: int = 1024,
) -> WeightedDraws:
    """Draw from each star's learnt proposal and weigh the draws by the posterior.

    Parameters
    ----------
    streams
        (S, 4) uint64, advanced in place.
    proposal
        What the burn-in begins with; without, that of a walk from the peaks.
    """
    run = burn_in(Start(block, modes, streams, proposal), grid, prior, walkers)
    n_stars, ndim = run.n_stars, run.coords.shape[1]
    coords = np.empty((n_stars, n_draws, ndim))
    log_density = np.empty((n_stars, n_draws))
    _draw(run.proposal, prior.fit_av, run.streams, coords, log_density)
    log_prob = log_prob_function(block, grid, prior)(coords.reshape(-1, ndim)).reshape(n_stars, n_draws)
    log_density += log_normalisation(run.proposal.centre.shape[1])
    log_weight = log_prob - log_density - HALF_LN_2PI * len(grid.loading)
    return WeightedDraws(coords, log_weight)


@kernel
def _draw(proposal, fit_av, streams, coords, log_density):
    n_stars, n_draws, _ = coords.shape
    scratch = make_scratch(proposal.centre.shape[1], n_draws)
    for star in range(n_stars):
        draw_independent(proposal, star, fit_av, streams[star], scratch, coords[star])
        log_proposal_density(proposal, star, fit_av, coords[star], scratch, log_density[star])


def log_mean_exp(log_values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return ln of the mean of exp over the last axis, (S,), summed in order."""
    out = np.empty(len(log_values))
    _log_mean_exp(log_values, out)
    return out


@kernel
def _log_mean_exp(log_values, out):
    n = log_values.shape[1]
    for star in range(log_values.shape[0]):
        largest = -np.inf
        for i in range(n):
            largest = max(largest, log_values[star, i])
        if largest == -np.inf:
            out[star] = -np.inf
            continue
        total = 0.0
        for i in range(n):
            total += np.exp(log_values[star, i] - largest)
        out[star] = largest + np.log(total / n)

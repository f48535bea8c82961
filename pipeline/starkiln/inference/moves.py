"""The move that takes one step of every star's ensemble at once.

Each star's walkers are a closed ensemble in two fixed halves: partners, proposals and acceptance come from
its own walkers and its own stream of random numbers, so a star's chain does not depend on its block.
"""

from __future__ import annotations

from typing import Any

import emcee
import numpy as np
from emcee.moves import Move
from numpy.typing import NDArray

from starkiln.inference.arithmetic import log
from starkiln.inference.compile import kernel
from starkiln.inference.proposal import (
    Proposal,
    draw_independent,
    log_density_there,
    log_proposal_density,
    make_scratch,
)
from starkiln.inference.streams import below, fill_uniform, uniform

class BlockMove(Move):
    """Differential evolution mixed with an independence proposal, for many stars side by side.

    Parameters
    ----------
    streams
        (S, 4) uint64, advanced in place.
    proposal
        The independence proposal.
    fit_av
        Whether the third coordinate is A_V.
    independence
        The chance that a star's step uses the independence proposal.
    accepted
        (S,) int64: counts accepted proposals, in place.
    walkers
        Of each star.

    Notes
    -----
    Differential evolution follows ter Braak (2006, Statistics and Computing 16, 239), with the scale
    2.38 / sqrt(2 ndim) and, one time in ten, 1.
    """

    def __init__(
        self,
        streams: NDArray[np.uint64],
        proposal: Proposal,
        fit_av: bool,
        independence: float,
        accepted: NDArray[np.int64],
        walkers: int,
    ) -> None:
        self.streams = streams
        self.proposal = proposal
        self.fit_av = fit_av
        self.independence = independence
        self.accepted = accepted
        self.log_proposal = np.full(len(streams) * walkers, np.nan)

    def propose(self, model: Any, state: emcee.State) -> tuple[emcee.State, NDArray[np.bool_]]:
        """Advance every walker once; ``state`` is changed in place, as emcee's own moves do."""
        n_walkers, ndim = state.coords.shape
        accepted = np.zeros(n_walkers, dtype=np.bool_)
        trial = np.empty((n_walkers // 2, ndim))
        log_factor = np.empty(n_walkers // 2)
        trial_log_proposal = np.empty(n_walkers // 2)
        for half in (0, 1):
            propose_half(
                state.coords,
                half,
                self.streams,
                self.proposal,
                self.fit_av,
                self.independence,
                self.log_proposal,
                trial,
                trial_log_proposal,
                log_factor,
            )
            # The bare function: the sampler's own wrapper converts each value through a Python list.
            log_prob = model.log_prob_fn(trial)
            accept_half(
                state.coords,
                state.log_prob,
                self.log_proposal,
                half,
                self.streams,
                trial,
                log_prob,
                trial_log_proposal,
                log_factor,
                accepted,
                self.accepted,
            )
        return state, accepted


@kernel
def propose_half(
    coords, half, streams, proposal, fit_av, independence, log_proposal, trial, trial_log_proposal, log_factor
):
    """Write the trial position and log proposal factor of half of every star's walkers.

    The log density of the independence proposal is kept for every position: NaN where it is not known.
    """
    n_stars = streams.shape[0]
    ndim = coords.shape[1]
    walkers = coords.shape[0] // n_stars
    lanes = walkers // 2
    scratch = make_scratch(proposal.centre.shape[1], lanes)
    for star in range(n_stars):
        stream = streams[star]
        mine = star * walkers + half * lanes
        partners = star * walkers + (1 - half) * lanes
        rows = slice(star * lanes, (star + 1) * lanes)
        if uniform(stream) < independence:
            draw_independent(proposal, star, fit_av, stream, scratch, trial[rows])
            log_density_there(proposal, star, fit_av, trial[rows], scratch, trial_log_proposal[rows])
            known = log_proposal[mine : mine + lanes]
            if np.isnan(known).any():
                log_proposal_density(proposal, star, fit_av, coords[mine : mine + lanes], scratch, known)
            for i in range(lanes):
                log_factor[star * lanes + i] = known[i] - trial_log_proposal[star * lanes + i]
        else:
            log_factor[rows] = 0.0
            trial_log_proposal[rows] = np.nan
            scale = 2.38 / np.sqrt(2.0 * ndim) if uniform(stream) < 0.5 else 1.0
            for i in range(lanes):
                a = below(stream, lanes)
                b = below(stream, lanes - 1)
                b += b >= a
                reach = scale * (1.0 + 0.02 * (uniform(stream) - 0.5))
                for k in range(ndim):
                    trial[star * lanes + i, k] = coords[mine + i, k] + reach * (
                        coords[partners + a, k] - coords[partners + b, k]
                    )


@kernel
def accept_half(
    coords,
    log_prob,
    log_proposal,
    half,
    streams,
    trial,
    trial_log_prob,
    trial_log_proposal,
    log_factor,
    accepted,
    counts,
):
    """Accept or refuse the trials of half of every star's walkers, in place."""
    n_stars = streams.shape[0]
    ndim = coords.shape[1]
    walkers = coords.shape[0] // n_stars
    lanes = walkers // 2
    threshold = np.empty((1, lanes))
    for star in range(n_stars):
        fill_uniform(streams[star], threshold)
        for i in range(lanes):
            threshold[0, i] = log(threshold[0, i])
        for i in range(lanes):
            row = star * lanes + i
            walker = star * walkers + half * lanes + i
            if threshold[0, i] < trial_log_prob[row] - log_prob[walker] + log_factor[row]:
                for k in range(ndim):
                    coords[walker, k] = trial[row, k]
                log_prob[walker] = trial_log_prob[row]
                log_proposal[walker] = trial_log_proposal[row]
                accepted[walker] = True
                counts[star] += 1

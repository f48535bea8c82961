"""The move that takes one step of every star's ensemble at once.

Each star's walkers are a closed ensemble in two fixed halves: partners, proposals and acceptance come from
its own walkers and its own stream of random numbers, so a star's chain does not depend on its block.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import emcee
import numpy as np
from emcee.moves import Move
from numpy.typing import NDArray

from starkiln.inference.arithmetic import log, put
from starkiln.inference.compile import kernel
from starkiln.inference.proposal import (
    Proposal,
    draw_independent,
    log_density_there,
    log_proposal_density,
    make_scratch,
)
from starkiln.inference.streams import below, fill_uniform, uniform

WHOLE = 0.5  # share of the steps by differential evolution that are as long as a difference


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
        (S,), the chance that a star's step uses the independence proposal.
    accepted
        (S,) int64: counts accepted proposals, in place.
    walkers
        Of each star.

    Notes
    -----
    Differential evolution follows ter Braak (2006, Statistics and Computing 16, 239), with the scale
    2.38 / sqrt(2 ndim) and, for leaps between peaks, half of the time 1.
    """

    def __init__(
        self,
        streams: NDArray[np.uint64],
        proposal: Proposal,
        fit_av: bool,
        independence: NDArray[np.float64],
        accepted: NDArray[np.int64],
        walkers: int,
    ) -> None:
        self.streams = streams
        self.proposal = proposal
        self.fit_av = fit_av
        self.independence = independence
        self.accepted = accepted
        # (S * walkers,), of where the walkers are; NaN where it is not known, after differential evolution.
        self.log_proposal = np.full(len(streams) * walkers, np.nan)

    def propose(self, model: Any, state: emcee.State) -> tuple[emcee.State, NDArray[np.bool_]]:
        """Advance every walker once; ``state`` is changed in place, as emcee's own moves do."""
        n_walkers, ndim = state.coords.shape
        accepted = np.zeros(n_walkers, dtype=np.bool_)
        trials = Trials(
            np.empty(len(self.streams), np.bool_),
            np.empty((2, n_walkers // 2, ndim)),
            np.empty((2, n_walkers // 2)),
        )
        draw_ahead(state.coords, self.streams, self.proposal, self.fit_av, self.independence, self.log_proposal, trials)
        for half in (0, 1):
            if not trials.is_independent.all():
                evolve_half(state.coords, half, self.streams, trials)
            # The bare function: the sampler's own wrapper converts each value through a Python list.
            log_prob = model.log_prob_fn(trials.coords[half])
            accept_half(
                state.coords,
                state.log_prob,
                self.log_proposal,
                half,
                self.streams,
                trials,
                log_prob,
                accepted,
                self.accepted,
            )
        return state, accepted


class Trials(NamedTuple):
    """A step's trials of S stars: which stars use the independence proposal, and the positions tried, half by half.

    Attributes
    ----------
    is_independent
        (S,) bool.
    coords
        (2, S * L, ndim), L being half of a star's walkers.
    log_proposal
        (2, S * L): log density of the independence proposal, NaN where it is not known.
    """

    is_independent: NDArray[np.bool_]
    coords: NDArray[np.float64]
    log_proposal: NDArray[np.float64]


@kernel
def draw_ahead(coords, streams, proposal, fit_av, independence, log_proposal, trials):
    """Choose each star's move, and draw the trials of both halves where they are independent of where walkers are."""
    n_stars = streams.shape[0]
    ndim = coords.shape[1]
    walkers = coords.shape[0] // n_stars
    lanes = walkers // 2
    scratch = make_scratch(proposal.centre.shape[1], walkers)
    drawn, density = np.empty((walkers, ndim)), np.empty(walkers)
    for star in range(n_stars):
        is_independent = uniform(streams[star]) < independence[star]
        trials.is_independent[star] = is_independent
        if is_independent:
            draw_independent(proposal, star, fit_av, streams[star], scratch, drawn)
            log_density_there(proposal, star, fit_av, drawn, scratch, density)
            for half in range(2):
                for i in range(lanes):
                    put(drawn[half * lanes + i], trials.coords[half, star * lanes + i])
                    trials.log_proposal[half, star * lanes + i] = density[half * lanes + i]
            mine = slice(star * walkers, (star + 1) * walkers)
            if _any_nan(log_proposal[mine]):
                log_proposal_density(proposal, star, fit_av, coords[mine], scratch, log_proposal[mine])


@kernel
def _any_nan(values):
    found = False
    for value in values:
        found |= value != value
    return found


@kernel
def evolve_half(coords, half, streams, trials):
    """Write the trials of half of the walkers of every star that moves by differential evolution."""
    n_stars = streams.shape[0]
    ndim = coords.shape[1]
    walkers = coords.shape[0] // n_stars
    lanes = walkers // 2
    for star in range(n_stars):
        if trials.is_independent[star]:
            continue
        stream = streams[star]
        mine = star * walkers + half * lanes
        partners = star * walkers + (1 - half) * lanes
        scale = 2.38 / np.sqrt(2.0 * ndim) if uniform(stream) < 1.0 - WHOLE else 1.0
        for i in range(lanes):
            a = below(stream, lanes)
            b = below(stream, lanes - 1)
            b += b >= a
            reach = scale * (1.0 + 0.02 * (uniform(stream) - 0.5))
            for k in range(ndim):
                difference = coords[partners + a, k] - coords[partners + b, k]
                trials.coords[half, star * lanes + i, k] = coords[mine + i, k] + reach * difference
            trials.log_proposal[half, star * lanes + i] = np.nan


@kernel
def accept_half(
    coords,
    log_prob,
    log_proposal,
    half,
    streams,
    trials,
    trial_log_prob,
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
            log_ratio = trial_log_prob[row] - log_prob[walker]
            if trials.is_independent[star]:
                log_ratio += log_proposal[walker] - trials.log_proposal[half, row]
            if threshold[0, i] < log_ratio:
                for k in range(ndim):
                    coords[walker, k] = trials.coords[half, row, k]
                log_prob[walker] = trial_log_prob[row]
                log_proposal[walker] = trials.log_proposal[half, row]
                accepted[walker] = True
                counts[star] += 1

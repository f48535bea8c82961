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

from starkiln.inference.arithmetic import log
from starkiln.inference.compile import kernel
from starkiln.inference.start import cholesky
from starkiln.inference.streams import below, normal_pair, uniform

TAIL = 4.0  # degrees of freedom of the learnt proposal: heavier tails than any posterior here
INFLATION = 1.3


class Proposal(NamedTuple):
    """A frozen independence proposal for each star, in the order ``axes`` of the coordinates.

    The first coordinate in that order (A_V, where it is fitted) has a Student t of its own, reflected at
    zero; the others have a multivariate t about their regression on it, so the reflection stays on the ridge.

    Attributes
    ----------
    axes
        (ndim,) int64.
    reflect
        Whether the first coordinate is reflected at zero.
    centre
        (S, ndim), in the order of ``axes``.
    factor
        (S, ndim, ndim), lower Cholesky factors in that order.
    """

    axes: NDArray[np.int64]
    reflect: bool
    centre: NDArray[np.float64]
    factor: NDArray[np.float64]


class BlockMove(Move):  # type: ignore[misc]
    """Differential evolution mixed with an independence proposal, for many stars side by side.

    Parameters
    ----------
    streams
        (S, 4) uint64, advanced in place.
    proposal
        The independence proposal, or None for differential evolution alone.
    independence
        The chance that a star's step uses the independence proposal.

    Notes
    -----
    Differential evolution follows ter Braak (2006, Statistics and Computing 16, 239), with the scale
    2.38 / sqrt(2 ndim) and, one time in ten, 1.
    """

    def __init__(
        self, streams: NDArray[np.uint64], proposal: Proposal | None = None, independence: float = 0.0
    ) -> None:
        self.streams = streams
        self.proposal = proposal
        self.independence = independence if proposal is not None else 0.0
        self.accepted_per_star = np.zeros(len(streams), np.int64)

    def propose(self, model: Any, state: emcee.State) -> tuple[emcee.State, NDArray[np.bool_]]:
        """Advance every walker once; ``state`` is changed in place, as emcee's own moves do."""
        n_walkers, ndim = state.coords.shape
        n_stars = len(self.streams)
        accepted = np.zeros(n_walkers, dtype=np.bool_)
        trial = np.empty((n_walkers // 2, ndim))
        log_factor = np.empty(n_walkers // 2)
        proposal = self.proposal or _no_proposal(n_stars, ndim)
        for half in (0, 1):
            propose_half(state.coords, half, self.streams, proposal, self.independence, trial, log_factor)
            # The bare function: the sampler's own wrapper converts each value through a Python list.
            log_prob = model.log_prob_fn(trial)
            accept_half(
                state.coords,
                state.log_prob,
                half,
                self.streams,
                trial,
                log_prob,
                log_factor,
                accepted,
                self.accepted_per_star,
            )
        return state, accepted


def _no_proposal(n_stars: int, ndim: int) -> Proposal:
    return Proposal(
        np.arange(ndim), False, np.zeros((n_stars, ndim)), np.broadcast_to(np.eye(ndim), (n_stars, ndim, ndim)).copy()
    )


def proposal_axes(ndim: int, fit_av: bool) -> NDArray[np.int64]:
    """Return the order of the coordinates in a proposal: A_V first where it is fitted."""
    axes = list(range(ndim))
    return np.array([2, *axes[:2], *axes[3:]] if fit_av else axes)


def learn_proposal(window: NDArray[np.float64], n_stars: int, fit_av: bool) -> Proposal:
    """Fit each star's independence proposal to a stretch of its chain.

    Parameters
    ----------
    window
        (n, S * W, ndim) positions of the walkers.
    """
    ndim = window.shape[2]
    axes = proposal_axes(ndim, fit_av)
    centre = np.empty((n_stars, ndim))
    factor = np.empty((n_stars, ndim, ndim))
    _learn(window, axes, centre, factor)
    return Proposal(axes, fit_av, centre, factor)


@kernel
def _learn(window, axes, centre, factor):
    n_steps, n_walkers, ndim = window.shape
    n_stars = centre.shape[0]
    lanes = n_walkers // n_stars
    covariance = np.empty((ndim, ndim))
    for star in range(n_stars):
        for k in range(ndim):
            total = 0.0
            for n in range(n_steps):
                for i in range(star * lanes, (star + 1) * lanes):
                    total += window[n, i, axes[k]]
            centre[star, k] = total / (n_steps * lanes)
        covariance[:] = 0.0
        for n in range(n_steps):
            for i in range(star * lanes, (star + 1) * lanes):
                for k in range(ndim):
                    for m in range(k + 1):
                        covariance[k, m] += (window[n, i, axes[k]] - centre[star, k]) * (
                            window[n, i, axes[m]] - centre[star, m]
                        )
        factor[star] = cholesky(covariance * (INFLATION / (n_steps * lanes)))


@kernel
def student_scale(stream):
    """Return sqrt(nu / chi2_nu) for nu = 4, whose chi-square is -2 ln of a product of two uniforms."""
    return np.sqrt(TAIL / (-2.0 * log(uniform(stream) * uniform(stream))))


@kernel
def draw_independent(proposal, star, stream, x, out):
    """Write one draw of a star's independence proposal; ``x`` is scratch of ndim."""
    ndim = out.size
    k = 0
    while k < ndim:
        x[k], spare = normal_pair(stream)
        if k + 1 < ndim:
            x[k + 1] = spare
        k += 2
    factor = proposal.factor[star]
    x[0] *= student_scale(stream)
    scale = student_scale(stream)
    first = proposal.centre[star, 0] + factor[0, 0] * x[0]
    if proposal.reflect and first < 0.0:
        first = -first
        x[0] = (first - proposal.centre[star, 0]) / factor[0, 0]
    out[proposal.axes[0]] = first
    for k in range(1, ndim):
        x[k] *= scale
        value = proposal.centre[star, k]
        for m in range(k + 1):
            value += factor[k, m] * x[m]
        out[proposal.axes[k]] = value


@kernel
def log_independent(proposal, star, coords, x):
    """Return the log density of a star's independence proposal, less a constant; ``x`` is scratch."""
    ndim = coords.size
    factor = proposal.factor[star]
    distance2 = 0.0
    for k in range(ndim):
        x[k] = coords[proposal.axes[k]] - proposal.centre[star, k]
        for m in range(k):
            x[k] -= factor[k, m] * x[m]
        x[k] /= factor[k, k]
        if k > 0:
            distance2 += x[k] * x[k]
    p = 1.0 / (1.0 + x[0] * x[0] / TAIL)
    density = p * p * np.sqrt(p)
    if proposal.reflect:
        mirrored = (-coords[proposal.axes[0]] - proposal.centre[star, 0]) / factor[0, 0]
        p = 1.0 / (1.0 + mirrored * mirrored / TAIL)
        density += p * p * np.sqrt(p)
    return log(density) - 0.5 * (TAIL + ndim - 1) * log(1.0 + distance2 / TAIL)


@kernel
def propose_half(coords, half, streams, proposal, independence, trial, log_factor):
    """Write the trial position and log proposal factor of half of every star's walkers."""
    n_stars = streams.shape[0]
    ndim = coords.shape[1]
    walkers = coords.shape[0] // n_stars
    lanes = walkers // 2
    x = np.empty(ndim)
    for star in range(n_stars):
        stream = streams[star]
        mine = star * walkers + half * lanes
        partners = star * walkers + (1 - half) * lanes
        if uniform(stream) < independence:
            for i in range(lanes):
                row = star * lanes + i
                draw_independent(proposal, star, stream, x, trial[row])
                log_factor[row] = log_independent(proposal, star, coords[mine + i], x)
                log_factor[row] -= log_independent(proposal, star, trial[row], x)
        else:
            scale = 2.38 / np.sqrt(2.0 * ndim) if uniform(stream) < 0.9 else 1.0
            for i in range(lanes):
                row = star * lanes + i
                a = below(stream, lanes)
                b = below(stream, lanes - 1)
                b += b >= a
                reach = scale * (1.0 + 0.02 * (uniform(stream) - 0.5))
                for k in range(ndim):
                    trial[row, k] = coords[mine + i, k] + reach * (coords[partners + a, k] - coords[partners + b, k])
                log_factor[row] = 0.0


@kernel
def accept_half(coords, log_prob, half, streams, trial, trial_log_prob, log_factor, accepted, counts):
    """Accept or refuse the trials of half of every star's walkers, in place."""
    n_stars = streams.shape[0]
    ndim = coords.shape[1]
    walkers = coords.shape[0] // n_stars
    lanes = walkers // 2
    for star in range(n_stars):
        stream = streams[star]
        for i in range(lanes):
            row = star * lanes + i
            walker = star * walkers + half * lanes + i
            threshold = log(uniform(stream))
            if threshold < trial_log_prob[row] - log_prob[walker] + log_factor[row]:
                for k in range(ndim):
                    coords[walker, k] = trial[row, k]
                log_prob[walker] = trial_log_prob[row]
                accepted[walker] = True
                counts[star] += 1

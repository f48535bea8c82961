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
from starkiln.inference.start import cholesky, solve_positive
from starkiln.inference.streams import below, fill_normal, fill_uniform, uniform

TAIL = 4.0  # degrees of freedom of the learnt proposal: heavier tails than any posterior here
INFLATION = 1.3
WIDENING = 6.0


class Proposal(NamedTuple):
    """A frozen independence proposal for each star, in the order ``axes`` of the coordinates.

    The first coordinate in that order (A_V, where it is fitted) has a Student t of its own, reflected at
    zero; the others have a multivariate t about a parabola in it, so the reflection stays on the ridge.

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
    bend
        (S, ndim), coefficients of the parabola; the first is not used.
    """

    axes: NDArray[np.int64]
    reflect: bool
    centre: NDArray[np.float64]
    factor: NDArray[np.float64]
    bend: NDArray[np.float64]

    def take(self, stars: NDArray[np.int64]) -> Proposal:
        """Return the proposal of some stars."""
        return self._replace(centre=self.centre[stars], factor=self.factor[stars], bend=self.bend[stars])


class BlockMove(Move):
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
    unit = np.broadcast_to(np.eye(ndim), (n_stars, ndim, ndim)).copy()
    return Proposal(np.arange(ndim), False, np.zeros((n_stars, ndim)), unit, np.zeros((n_stars, ndim)))


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
    proposal = Proposal(
        proposal_axes(ndim, fit_av),
        fit_av,
        np.zeros((n_stars, ndim)),
        np.zeros((n_stars, ndim, ndim)),
        np.zeros((n_stars, ndim)),
    )
    _learn(window, proposal)
    return proposal


@kernel
def parabola(x):
    """Return the curved term at a standardised first coordinate; straight on beyond 3, where little was learnt."""
    near = min(abs(x), 3.0)
    return near * (2.0 * abs(x) - near) - 1.0


@kernel
def spread2(x):
    """Return by how much the variance of the others grows at a standardised first coordinate."""
    return 1.0 + x * x / WIDENING


@kernel
def _learn(window, proposal):
    n_steps, n_walkers, ndim = window.shape
    n_stars = proposal.centre.shape[0]
    lanes = n_walkers // n_stars
    n = n_steps * lanes
    samples = np.empty((ndim, n))
    for star in range(n_stars):
        for k in range(ndim):
            axis = proposal.axes[k]
            for t in range(n_steps):
                for i in range(lanes):
                    samples[k, t * lanes + i] = window[t, star * lanes + i, axis]
        _learn_first(samples[0], proposal.centre[star], proposal.factor[star])
        if ndim > 1:
            _learn_others(samples, proposal.centre[star], proposal.factor[star], proposal.bend[star])


@kernel
def _learn_first(values, centre, factor):
    """Fit the first coordinate, and leave its values standardised."""
    mean = 0.0
    for i in range(values.size):
        mean += values[i]
    mean /= values.size
    variance = 0.0
    for i in range(values.size):
        variance += (values[i] - mean) ** 2
    centre[0] = mean
    factor[0, 0] = np.sqrt(INFLATION * variance / values.size + 1e-300)
    for i in range(values.size):
        values[i] = (values[i] - mean) / factor[0, 0]


@kernel
def _learn_others(samples, centre, factor, bend):
    """Fit the other coordinates by parabolas in the first, and the covariance of what is left."""
    ndim, n = samples.shape
    normal = np.zeros((3, 3))
    basis = np.empty(3)
    right = np.zeros((ndim, 3))
    for k in range(1, ndim):
        centre[k] = samples[k, 0]
    for i in range(n):
        basis[0], basis[1], basis[2] = 1.0, samples[0, i], parabola(samples[0, i])
        for a in range(3):
            for b in range(3):
                normal[a, b] += basis[a] * basis[b]
            for k in range(1, ndim):
                right[k, a] += basis[a] * (samples[k, i] - centre[k])
    for a in range(3):
        normal[a, a] += 1e-9 * n
    residual = np.zeros((ndim - 1, ndim - 1))
    for k in range(1, ndim):
        solution = solve_positive(normal, right[k])
        for i in range(n):
            samples[k, i] -= centre[k] + solution[0] + solution[1] * samples[0, i]
            samples[k, i] -= solution[2] * parabola(samples[0, i])
        centre[k] += solution[0]
        factor[k, 0] = solution[1]
        bend[k] = solution[2]
    for k in range(1, ndim):
        for m in range(1, k + 1):
            for i in range(n):
                residual[k - 1, m - 1] += samples[k, i] * samples[m, i] / spread2(samples[0, i])
            residual[k - 1, m - 1] *= INFLATION / n
    lower = cholesky(residual)
    for k in range(1, ndim):
        put(lower[k - 1], factor[k, 1:])


class Scratch(NamedTuple):
    """Buffers for one star's proposals, L lanes each: the last four rows of ``uniforms`` make the two scales."""

    uniforms: NDArray[np.float64]
    normals: NDArray[np.float64]
    x: NDArray[np.float64]
    scale: NDArray[np.float64]


@kernel
def make_scratch(ndim, lanes):
    """Return the buffers for proposals of a star."""
    even = ndim + ndim % 2
    return Scratch(np.empty((even + 4, lanes)), np.empty((even, lanes)), np.empty((ndim, lanes)), np.empty((2, lanes)))


@kernel
def draw_independent(proposal, star, stream, scratch, out):
    """Write L draws (L, ndim) of a star's independence proposal, leaving them standardised in ``scratch.x``.

    A Student t with four degrees of freedom is a normal times sqrt(4 / chi2), whose chi-square is -2 ln of a
    product of two uniforms.
    """
    lanes, ndim = out.shape
    even = scratch.normals.shape[0]
    factor, centre, bend = proposal.factor[star], proposal.centre[star], proposal.bend[star]
    x = scratch.x
    fill_uniform(stream, scratch.uniforms)
    fill_normal(scratch.uniforms[:even], scratch.normals)
    for k in range(2):
        for i in range(lanes):
            product = scratch.uniforms[even + 2 * k, i] * scratch.uniforms[even + 2 * k + 1, i]
            scratch.scale[k, i] = np.sqrt(TAIL / (-2.0 * log(product)))
    for i in range(lanes):
        first = centre[0] + factor[0, 0] * scratch.normals[0, i] * scratch.scale[0, i]
        if proposal.reflect:
            first = abs(first)
        x[0, i] = (first - centre[0]) / factor[0, 0]
        out[i, proposal.axes[0]] = first
    for k in range(1, ndim):
        axis = proposal.axes[k]
        for i in range(lanes):
            x[k, i] = scratch.normals[k, i] * scratch.scale[1, i]
            value = 0.0
            for m in range(1, k + 1):
                value += factor[k, m] * x[m, i]
            value = value * np.sqrt(spread2(x[0, i])) + factor[k, 0] * x[0, i] + bend[k] * parabola(x[0, i])
            value += centre[k]
            out[i, axis] = value


@kernel
def standardise(proposal, star, coords, x):
    """Write positions (L, ndim) as standardised proposal coordinates (ndim, L)."""
    factor, centre, bend = proposal.factor[star], proposal.centre[star], proposal.bend[star]
    for k in range(x.shape[0]):
        axis = proposal.axes[k]
        for i in range(x.shape[1]):
            value = coords[i, axis] - centre[k]
            if k > 0:
                value -= factor[k, 0] * x[0, i] + bend[k] * parabola(x[0, i])
                value /= np.sqrt(spread2(x[0, i]))
            for m in range(1, k):
                value -= factor[k, m] * x[m, i]
            x[k, i] = value / factor[k, k]


@kernel
def add_log_independent(proposal, star, x, sign, out):
    """Add ``sign`` times the log density of the proposal, less a constant, at standardised coordinates."""
    ndim, lanes = x.shape
    # A draw and its mirror image share the others' part: they are placed by where the first coordinate ends.
    mirror = -2.0 * proposal.centre[star, 0] / proposal.factor[star, 0, 0]
    for i in range(lanes):
        p = 1.0 / (1.0 + x[0, i] * x[0, i] / TAIL)
        density = p * p * np.sqrt(p)
        if proposal.reflect:
            mirrored = mirror - x[0, i]
            p = 1.0 / (1.0 + mirrored * mirrored / TAIL)
            density += p * p * np.sqrt(p)
        distance2 = 0.0
        for k in range(1, ndim):
            distance2 += x[k, i] * x[k, i]
        log_others = (TAIL + ndim - 1) * log(1.0 + distance2 / TAIL) + (ndim - 1) * log(spread2(x[0, i]))
        out[i] += sign * (log(density) - 0.5 * log_others)


@kernel
def propose_half(coords, half, streams, proposal, independence, trial, log_factor):
    """Write the trial position and log proposal factor of half of every star's walkers."""
    n_stars = streams.shape[0]
    ndim = coords.shape[1]
    walkers = coords.shape[0] // n_stars
    lanes = walkers // 2
    scratch = make_scratch(ndim, lanes)
    for star in range(n_stars):
        stream = streams[star]
        mine = star * walkers + half * lanes
        partners = star * walkers + (1 - half) * lanes
        rows = slice(star * lanes, (star + 1) * lanes)
        log_factor[rows] = 0.0
        if uniform(stream) < independence:
            draw_independent(proposal, star, stream, scratch, trial[rows])
            add_log_independent(proposal, star, scratch.x, -1.0, log_factor[rows])
            standardise(proposal, star, coords[mine : mine + lanes], scratch.x)
            add_log_independent(proposal, star, scratch.x, 1.0, log_factor[rows])
        else:
            scale = 2.38 / np.sqrt(2.0 * ndim) if uniform(stream) < 0.9 else 1.0
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
def accept_half(coords, log_prob, half, streams, trial, trial_log_prob, log_factor, accepted, counts):
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
                accepted[walker] = True
                counts[star] += 1

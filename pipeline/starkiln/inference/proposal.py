"""The independence proposal of each star: its marginal in temperature, and everything else given the temperature.

Temperature comes first because a posterior may have several peaks in it, while dust, angular size and the photosphere's
factors have one at any given temperature. The marginal is exponential between knots in heat = 1e4 K / T. Given the
heat, A_V (where it is fitted) is logistic and cut at zero; given both, the others are multivariate t with eight degrees
of freedom about a line in A_V. Their parameters are linear in heat between
the knots, but for their places, which are cubic.
"""

from __future__ import annotations

from math import gamma, pi
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp, log, put
from starkiln.inference.compile import kernel
from starkiln.inference.start import cholesky
from starkiln.inference.streams import fill_normal, fill_uniform

TAIL = 8.0  # degrees of freedom: heavier tails than a posterior's at fixed temperature and dust
FIRST_NORMAL = 7  # the uniforms before it: heat, A_V, four for the t's scale, and which t
FARTHEST_AV = -15.0  # of the logistic's location in its scales: beyond, it is an exponential


class Proposal(NamedTuple):
    """An independence proposal for each of S stars, at K knots of which each uses its first ``n_knots``.

    Attributes
    ----------
    n_knots
        (S,) int64.
    heat
        (S, K), ascending from one bound of the temperature to the other.
    log_density
        (S, K): of the marginal in heat, normalised.
    mass
        (S, K): cumulative, from 0 to 1.
    av
        (S, K, 3): location, mean and scale of A_V's cut logistic in magnitudes.
    centre, slope
        (S, K, M): means of the other coordinates at the mean A_V, and their change with A_V: glow first, then the rest.
    tangent
        (S, K, 2 + M): derivatives with heat of A_V's location and mean and of the centres, which follow cubics between
        knots, as the ridge of a posterior bends; all else is linear.
    factor
        (S, K, M, M): lower Cholesky factors of their scatter.
    learnt_mean, learnt_factor
        (S, M) and (S, M, M): the second t's place and Cholesky factor, in units of the first's scatter.
    """

    n_knots: NDArray[np.int64]
    heat: NDArray[np.float64]
    log_density: NDArray[np.float64]
    mass: NDArray[np.float64]
    av: NDArray[np.float64]
    centre: NDArray[np.float64]
    slope: NDArray[np.float64]
    tangent: NDArray[np.float64]
    factor: NDArray[np.float64]
    learnt_mean: NDArray[np.float64]
    learnt_factor: NDArray[np.float64]

    def take(self, stars: NDArray[np.int64]) -> Proposal:
        """Return the proposal of some stars."""
        columns = {name: getattr(self, name)[stars] for name in self._fields}
        return Proposal(**columns)


def empty_proposal(n_stars: int, n_knots: int, ndim: int, fit_av: bool) -> Proposal:
    """Return the arrays of a proposal, to be filled."""
    others = ndim - 1 - fit_av
    shape = (n_stars, n_knots)
    return Proposal(
        np.zeros(n_stars, np.int64),
        np.zeros(shape),
        np.zeros(shape),
        np.zeros(shape),
        np.zeros((*shape, 3)),
        np.zeros((*shape, others)),
        np.zeros((*shape, others)),
        np.zeros((*shape, 2 + others)),
        np.zeros((*shape, others, others)),
        np.zeros((n_stars, others)),
        np.broadcast_to(np.eye(others), (n_stars, others, others)).copy(),
    )


def log_normalisation(n_others: int) -> float:
    """Return what `log_proposal_density` leaves out: the log normalisation of the others' t."""
    return float(np.log(gamma(0.5 * (TAIL + n_others)) / gamma(0.5 * TAIL)) - 0.5 * n_others * np.log(pi * TAIL))


class Scratch(NamedTuple):
    """Buffers for one star's proposals, L lanes each: uniforms of heat, A_V, normals and the t's scale."""

    uniforms: NDArray[np.float64]
    normals: NDArray[np.float64]
    spot: NDArray[np.float64]  # where between two knots
    knot: NDArray[np.int64]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    weight: NDArray[np.float64]


@kernel
def make_scratch(n_others, lanes):
    """Return the buffers for proposals of a star."""
    even = n_others + n_others % 2
    return Scratch(
        np.empty((FIRST_NORMAL + even, lanes)),
        np.empty((even, lanes)),
        np.empty(lanes),
        np.empty(lanes, dtype=np.int64),
        np.empty((n_others, lanes)),
        np.empty((n_others, lanes)),
        np.empty(lanes),
    )


@kernel
def last_at_most(values, n, value):
    """Return the last of the first n - 1 ascending values that is not above a value."""
    low, high = 0, n - 1
    while high - low > 1:
        middle = (low + high) >> 1
        if values[middle] <= value:
            low = middle
        else:
            high = middle
    return low


@kernel
def between(values, tangents, k, s, width):
    """Return a cubic's value between knots k and k + 1, at the share s of their distance."""
    rise = values[k + 1] - values[k]
    first, second = width * tangents[k] - rise, width * tangents[k + 1] - rise
    return values[k] + s * (rise + (1.0 - s) * ((1.0 - s) * first - s * second))


@kernel
def draw_independent(proposal, star, fit_av, stream, scratch, out):
    """Write L draws (L, ndim) of a star's proposal.

    The t is a normal times sqrt(8 / chi2), whose chi-square is -2 ln of a product of four uniforms.
    """
    lanes = out.shape[0]
    n_others = scratch.x.shape[0]
    even = scratch.normals.shape[0]
    uniforms, normals, spot, knot = scratch.uniforms, scratch.normals, scratch.spot, scratch.knot
    n = proposal.n_knots[star]
    heat, mass, log_density = proposal.heat[star], proposal.mass[star], proposal.log_density[star]
    av, centre, slope = proposal.av[star], proposal.centre[star], proposal.slope[star]
    tangent, factor = proposal.tangent[star], proposal.factor[star]
    learnt_mean, learnt_factor = proposal.learnt_mean[star], proposal.learnt_factor[star]
    fill_uniform(stream, uniforms)
    fill_normal(uniforms[FIRST_NORMAL:], normals)
    for i in range(lanes):
        k = last_at_most(mass, n, uniforms[0, i])
        knot[i] = k
        share = (uniforms[0, i] - mass[k]) / (mass[k + 1] - mass[k])
        rise = log_density[k + 1] - log_density[k]
        s = log(1.0 + share * (exp(rise) - 1.0)) / rise if abs(rise) > 1e-5 else share
        spot[i] = min(max(s, 0.0), 1.0)
        out[i, 0] = heat[k] + spot[i] * (heat[k + 1] - heat[k])
    if fit_av:
        for i in range(lanes):
            k, s = knot[i], spot[i]
            location = between(av[:, 0], tangent[:, 0], k, s, heat[k + 1] - heat[k])
            scale = av[k, 2] + s * (av[k + 1, 2] - av[k, 2])
            survival = uniforms[1, i] / (1.0 + exp(-location / scale))
            out[i, 2] = max(location + scale * log((1.0 - survival) / survival), 0.0)
    for i in range(lanes):
        product = (uniforms[2, i] * uniforms[3, i]) * (uniforms[4, i] * uniforms[5, i])
        spread = np.sqrt(TAIL / (-2.0 * log(product)))
        for m in range(even):
            normals[m, i] *= spread
        if uniforms[6, i] < 0.5:
            for m in range(n_others - 1, -1, -1):
                value = learnt_mean[m]
                for j in range(m + 1):
                    value += learnt_factor[m, j] * normals[j, i]
                normals[m, i] = value
    for m in range(n_others):
        axis = other_axis(m, fit_av)
        for i in range(lanes):
            k, s = knot[i], spot[i]
            value = between(centre[:, m], tangent[:, 2 + m], k, s, heat[k + 1] - heat[k])
            if fit_av:
                offset = out[i, 2] - between(av[:, 1], tangent[:, 1], k, s, heat[k + 1] - heat[k])
                value += (slope[k, m] + s * (slope[k + 1, m] - slope[k, m])) * offset
            for j in range(m + 1):
                value += (factor[k, m, j] + s * (factor[k + 1, m, j] - factor[k, m, j])) * normals[j, i]
            out[i, axis] = value


@kernel
def other_axis(m, fit_av):
    """Return the coordinate of a walker that is the m-th of the others: glow, then what follows A_V."""
    return 1 + m + (1 if fit_av and m > 0 else 0)


@kernel
def log_proposal_density(proposal, star, fit_av, coords, scratch, out):
    """Write the log density (L,) of a star's proposal at positions (L, ndim), less `log_normalisation`."""
    lanes = coords.shape[0]
    n_others = scratch.x.shape[0]
    spot, knot, x = scratch.spot, scratch.knot, scratch.x
    heat, log_density = proposal.heat[star], proposal.log_density[star]
    av, tangent, factor = proposal.av[star], proposal.tangent[star], proposal.factor[star]
    find_knots(proposal, star, coords, scratch)
    for i in range(lanes):
        k, s = knot[i], spot[i]
        out[i] = log_density[k] + s * (log_density[k + 1] - log_density[k])
    standardise(proposal, star, fit_av, coords, scratch)
    for i in range(lanes):
        k, s = knot[i], spot[i]
        volume = 1.0
        for m in range(n_others):
            volume *= factor[k, m, m] + s * (factor[k + 1, m, m] - factor[k, m, m])
        weight = 1.0
        if fit_av:
            location = between(av[:, 0], tangent[:, 0], k, s, heat[k + 1] - heat[k])
            scale = av[k, 2] + s * (av[k + 1, 2] - av[k, 2])
            inverse = 1.0 / scale
            tail = exp((location - coords[i, 2]) * inverse)
            weight = tail * (1.0 + exp(-location * inverse)) * inverse / ((1.0 + tail) * (1.0 + tail))
        scratch.weight[i] = weight / volume
    learnt_mean, learnt_factor = proposal.learnt_mean[star], proposal.learnt_factor[star]
    learnt_volume = 1.0
    for m in range(n_others):
        learnt_volume *= learnt_factor[m, m]
    y = scratch.y
    for i in range(lanes):
        first, second = 0.0, 0.0
        for m in range(n_others):
            first += x[m, i] * x[m, i]
            value = x[m, i] - learnt_mean[m]
            for j in range(m):
                value -= learnt_factor[m, j] * y[j, i]
            y[m, i] = value / learnt_factor[m, m]
            second += y[m, i] * y[m, i]
        density = 0.5 * (_t_density(first, n_others) + _t_density(second, n_others) / learnt_volume)
        out[i] += log(scratch.weight[i] * density)


@kernel
def _t_density(distance2, n_others):
    """Return (1 + distance2 / 8) to the power -(8 + n_others) / 2."""
    inverse = 1.0 / (1.0 + distance2 / TAIL)
    root = np.sqrt(inverse)
    power = inverse * inverse
    power *= power
    for _ in range(n_others):
        power *= root
    return power


@kernel
def find_knots(proposal, star, coords, scratch):
    """Write between which knots each position lies, and where."""
    heat, n = proposal.heat[star], proposal.n_knots[star]
    for i in range(coords.shape[0]):
        k = last_at_most(heat, n, coords[i, 0])
        scratch.knot[i] = k
        scratch.spot[i] = min(max((coords[i, 0] - heat[k]) / (heat[k + 1] - heat[k]), 0.0), 1.0)


@kernel
def standardise(proposal, star, fit_av, coords, scratch):
    """Write the others' standardised coordinates to ``scratch.x``, with ``scratch.knot`` and ``spot`` known."""
    spot, knot, x = scratch.spot, scratch.knot, scratch.x
    heat, av, tangent = proposal.heat[star], proposal.av[star], proposal.tangent[star]
    centre, slope, factor = proposal.centre[star], proposal.slope[star], proposal.factor[star]
    for m in range(x.shape[0]):
        axis = other_axis(m, fit_av)
        for i in range(x.shape[1]):
            k, s = knot[i], spot[i]
            value = coords[i, axis] - between(centre[:, m], tangent[:, 2 + m], k, s, heat[k + 1] - heat[k])
            if fit_av:
                offset = coords[i, 2] - between(av[:, 1], tangent[:, 1], k, s, heat[k + 1] - heat[k])
                value -= (slope[k, m] + s * (slope[k + 1, m] - slope[k, m])) * offset
            for j in range(m):
                value -= (factor[k, m, j] + s * (factor[k + 1, m, j] - factor[k, m, j])) * x[j, i]
            x[m, i] = value / (factor[k, m, m] + s * (factor[k + 1, m, m] - factor[k, m, m]))


@kernel
def learn_others(window, fit_av, proposal):
    """Fit each star's second t to positions (n, S * W, ndim) of its walkers."""
    n_stars, n_others = proposal.learnt_mean.shape
    n_steps, n_walkers, ndim = window.shape
    walkers = n_walkers // n_stars
    coords = np.empty((n_steps * walkers, ndim))
    scratch = make_scratch(n_others, n_steps * walkers)
    covariance = np.empty((n_others, n_others))
    for star in range(n_stars):
        for t in range(n_steps):
            for w in range(walkers):
                put(window[t, star * walkers + w], coords[t * walkers + w])
        find_knots(proposal, star, coords, scratch)
        standardise(proposal, star, fit_av, coords, scratch)
        for m in range(n_others):
            total = 0.0
            for i in range(len(coords)):
                total += scratch.x[m, i]
            proposal.learnt_mean[star, m] = total / len(coords)
            for j in range(m + 1):
                total = 0.0
                for i in range(len(coords)):
                    total += (scratch.x[m, i] - proposal.learnt_mean[star, m]) * (
                        scratch.x[j, i] - proposal.learnt_mean[star, j]
                    )
                covariance[m, j] = covariance[j, m] = total / len(coords)
            covariance[m, m] += 1e-6
        lower = cholesky(covariance)
        for m in range(n_others):
            put(lower[m], proposal.learnt_factor[star, m])

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
from starkiln.inference.compile import inlined, kernel
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
    """Buffers for L positions of one star: uniforms of heat, A_V, the t's scale, which t and the normals; where they are.

    Attributes
    ----------
    knot, spot
        (L,): the knot below, and the share of the way to the next.
    location, middle, scale
        (L,): of A_V's cut logistic there.
    x, y
        (M, L): the others standardised by the first t and by the second.
    """

    uniforms: NDArray[np.float64]
    normals: NDArray[np.float64]
    knot: NDArray[np.uint64]
    spot: NDArray[np.float64]
    location: NDArray[np.float64]
    middle: NDArray[np.float64]
    scale: NDArray[np.float64]
    x: NDArray[np.float64]
    y: NDArray[np.float64]


@kernel
def make_scratch(n_others, lanes):
    """Return the buffers for proposals of a star."""
    even = n_others + n_others % 2
    return Scratch(
        np.empty((FIRST_NORMAL + even, lanes)),
        np.empty((even, lanes)),
        np.empty(lanes, dtype=np.uint64),
        np.empty(lanes),
        np.empty(lanes),
        np.empty(lanes),
        np.empty(lanes),
        np.empty((n_others, lanes)),
        np.empty((n_others, lanes)),
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
    return np.uint64(low)


@kernel
def other_axis(m, fit_av):
    """Return the coordinate of a walker that is the m-th of the others: glow, then what follows A_V."""
    return 1 + m + (1 if fit_av and m > 0 else 0)


@kernel
def draw_independent(proposal, star, fit_av, stream, scratch, out):
    """Write L draws (L, ndim) of a star's proposal, and leave in ``scratch`` where they are.

    The t is a normal times sqrt(8 / chi2), whose chi-square is -2 ln of a product of four uniforms.
    """
    uniforms, normals, knot, spot = scratch.uniforms, scratch.normals, scratch.knot, scratch.spot
    heat, mass, log_density = proposal.heat[star], proposal.mass[star], proposal.log_density[star]
    fill_uniform(stream, uniforms)
    fill_normal(uniforms[FIRST_NORMAL:], normals)
    lanes = out.shape[0]
    for i in range(lanes):
        knot[i] = last_at_most(mass, proposal.n_knots[star], uniforms[0, i])
    one = np.uint64(1)
    for i in range(lanes):
        k = knot[i]
        share = (uniforms[0, i] - mass[k]) / (mass[k + one] - mass[k])
        rise = log_density[k + one] - log_density[k]
        bent = log(max(1.0 + share * (exp(rise) - 1.0), 1e-300)) / rise
        s = min(max(bent if abs(rise) > 1e-5 else share, 0.0), 1.0)
        spot[i] = s
        out[i, 0] = heat[k] + s * (heat[k + one] - heat[k])
    if fit_av:
        _locate_av(proposal, star, scratch)
        location, scale = scratch.location, scratch.scale
        for i in range(lanes):
            survival = uniforms[1, i] / (1.0 + exp(-location[i] / scale[i]))
            out[i, 2] = max(location[i] + scale[i] * log((1.0 - survival) / survival), 0.0)
    _draw_others(proposal, star, fit_av, scratch, out)


@kernel
def _locate_av(proposal, star, scratch):
    """Write location, mean and scale of A_V's cut logistic between the knots."""
    heat, av, tangent = proposal.heat[star], proposal.av[star], proposal.tangent[star]
    one = np.uint64(1)
    for i in range(scratch.spot.size):
        k, s = scratch.knot[i], scratch.spot[i]
        width = heat[k + one] - heat[k]
        scratch.location[i] = _between(av[k, 0], av[k + one, 0], tangent[k, 0], tangent[k + one, 0], s, width)
        scratch.middle[i] = _between(av[k, 1], av[k + one, 1], tangent[k, 1], tangent[k + one, 1], s, width)
        scratch.scale[i] = av[k, 2] + s * (av[k + one, 2] - av[k, 2])


@inlined
def _between(here, there, tangent_here, tangent_there, s, width):
    """Return a cubic's value at the share s of the width between two knots."""
    rise = there - here
    return here + s * (rise + (1.0 - s) * ((1.0 - s) * (width * tangent_here - rise) - s * (width * tangent_there - rise)))


@kernel
def _draw_others(proposal, star, fit_av, scratch, out):
    uniforms, normals, x = scratch.uniforms, scratch.normals, scratch.x
    mean, learnt = proposal.learnt_mean[star], proposal.learnt_factor[star]
    lanes = out.shape[0]
    for i in range(lanes):
        product = (uniforms[2, i] * uniforms[3, i]) * (uniforms[4, i] * uniforms[5, i])
        scratch.y[0, i] = np.sqrt(TAIL / (-2.0 * log(product)))
    for m in range(x.shape[0] - 1, -1, -1):
        for i in range(lanes):
            first = normals[m, i]
            second = 0.0
            for j in range(m + 1):
                second += learnt[m, j] * normals[j, i]
            spread = scratch.y[0, i]
            x[m, i] = spread * first if uniforms[6, i] < 0.5 else mean[m] + spread * second
    factor = proposal.factor[star]
    one = np.uint64(1)
    for m in range(x.shape[0]):
        axis = other_axis(m, fit_av)
        _centre(proposal, star, fit_av, m, scratch, out, normals[m])
        for i in range(lanes):
            k, s = scratch.knot[i], scratch.spot[i]
            value = normals[m, i]
            for j in range(m + 1):
                value += (factor[k, m, j] + s * (factor[k + one, m, j] - factor[k, m, j])) * x[j, i]
            out[i, axis] = value


@kernel
def _centre(proposal, star, fit_av, m, scratch, coords, out):
    """Write the place of the m-th of the other coordinates at the positions' heat and A_V."""
    heat, tangent = proposal.heat[star], proposal.tangent[star]
    centre, slope = proposal.centre[star], proposal.slope[star]
    one = np.uint64(1)
    for i in range(out.size):
        k, s = scratch.knot[i], scratch.spot[i]
        width = heat[k + one] - heat[k]
        out[i] = _between(centre[k, m], centre[k + one, m], tangent[k, 2 + m], tangent[k + one, 2 + m], s, width)
    if fit_av:
        for i in range(out.size):
            k, s = scratch.knot[i], scratch.spot[i]
            out[i] += (slope[k, m] + s * (slope[k + one, m] - slope[k, m])) * (coords[i, 2] - scratch.middle[i])


@kernel
def log_proposal_density(proposal, star, fit_av, coords, scratch, out):
    """Write the log density (L,) of a star's proposal at positions (L, ndim), less `log_normalisation`."""
    find_knots(proposal, star, coords, scratch)
    if fit_av:
        _locate_av(proposal, star, scratch)
    standardise(proposal, star, fit_av, coords, scratch)
    log_density_there(proposal, star, fit_av, coords, scratch, out)


@kernel
def find_knots(proposal, star, coords, scratch):
    """Write between which knots each position lies, and where."""
    heat, n = proposal.heat[star], proposal.n_knots[star]
    one = np.uint64(1)
    for i in range(coords.shape[0]):
        scratch.knot[i] = last_at_most(heat, n, coords[i, 0])
    for i in range(coords.shape[0]):
        k = scratch.knot[i]
        scratch.spot[i] = min(max((coords[i, 0] - heat[k]) / (heat[k + one] - heat[k]), 0.0), 1.0)


@kernel
def standardise(proposal, star, fit_av, coords, scratch):
    """Write the others' standardised coordinates to ``scratch.x``, with all else in ``scratch`` known."""
    x, factor = scratch.x, proposal.factor[star]
    one = np.uint64(1)
    for m in range(x.shape[0]):
        axis = other_axis(m, fit_av)
        _centre(proposal, star, fit_av, m, scratch, coords, scratch.y[m])
        for i in range(x.shape[1]):
            k, s = scratch.knot[i], scratch.spot[i]
            value = coords[i, axis] - scratch.y[m, i]
            for j in range(m):
                value -= (factor[k, m, j] + s * (factor[k + one, m, j] - factor[k, m, j])) * x[j, i]
            x[m, i] = value / (factor[k, m, m] + s * (factor[k + one, m, m] - factor[k, m, m]))


@kernel
def log_density_there(proposal, star, fit_av, coords, scratch, out):
    """Write the log density as `log_proposal_density` does, with ``scratch`` known."""
    x, y, knot, spot = scratch.x, scratch.y, scratch.knot, scratch.spot
    mean, learnt = proposal.learnt_mean[star], proposal.learnt_factor[star]
    log_density, factor = proposal.log_density[star], proposal.factor[star]
    n_others, lanes = x.shape
    volume = 1.0
    for m in range(n_others):
        volume *= learnt[m, m]
        for i in range(lanes):
            value = x[m, i] - mean[m]
            for j in range(m):
                value -= learnt[m, j] * y[j, i]
            y[m, i] = value / learnt[m, m]
    one = np.uint64(1)
    for i in range(lanes):
        k, s = knot[i], spot[i]
        first, second, density = 0.0, 0.0, 1.0
        for m in range(n_others):
            first += x[m, i] * x[m, i]
            second += y[m, i] * y[m, i]
            density *= factor[k, m, m] + s * (factor[k + one, m, m] - factor[k, m, m])
        density = 0.5 * (_t_density(first, n_others) + _t_density(second, n_others) / volume) / density
        if fit_av:
            inverse = 1.0 / scratch.scale[i]
            tail = exp((scratch.location[i] - coords[i, 2]) * inverse)
            cut = 1.0 + exp(-scratch.location[i] * inverse)
            density *= tail * cut * inverse / ((1.0 + tail) * (1.0 + tail))
        out[i] = log_density[k] + s * (log_density[k + one] - log_density[k]) + log(max(density, 1e-300))


@inlined
def _t_density(distance2, n_others):
    """Return (1 + distance2 / 8) to the power -(8 + n_others) / 2."""
    inverse = 1.0 / (1.0 + distance2 / TAIL)
    root = np.sqrt(inverse)
    power = (inverse * inverse) * (inverse * inverse)
    for _ in range(n_others):
        power *= root
    return power


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
        if fit_av:
            _locate_av(proposal, star, scratch)
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

"""The independence proposal of each star: its marginal in temperature, and everything else given the temperature.

Temperature comes first because a posterior may have several peaks in it, while dust, angular size and the photosphere's
factors have one at any given temperature. The marginal is exponential between knots in heat = 1e4 K / T. Given the
heat, A_V (where it is fitted) is logistic and cut at zero; given both, the others, of which glow = ln(Omega T) is the
first, follow two multivariate t with eight degrees of freedom in equal parts: one about a line in A_V, and one that the
burn-in fits. Their parameters are linear in heat between the knots, but for their places, which are cubic.
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
FIRST_REACH = 4.0  # of the second t before it has learnt: it looks for peaks beside the first
FARTHEST_AV = -15.0  # of the logistic's location in its scales, at a knot: beyond, it is an exponential


class Proposal(NamedTuple):
    """An independence proposal for each of S stars, at K knots of which each uses its first ``n_knots``.

    Attributes
    ----------
    n_knots
        (S,) int64.
    heat
        (S, K): 1e4 K / T, ascending from one bound of the temperature to the other.
    log_density
        (S, K): of the marginal in heat, normalised.
    mass
        (S, K): cumulative, from 0 to 1.
    av
        (S, 3, K): location, mean and scale of A_V's cut logistic in magnitudes.
    centre, slope
        (S, M, K): means of the other coordinates at the mean A_V, and their change with A_V: glow first, then the rest.
    tangent
        (S, 2 + M, K): derivatives with heat of A_V's location and mean and of the centres, which follow cubics between
        knots, as the ridge of a posterior bends; all else is linear.
    factor
        (S, M, M, K): lower Cholesky factors of their scatter.
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

    def zeros(*shape: int) -> NDArray[np.float64]:
        return np.zeros((n_stars, *shape, n_knots))

    return Proposal(
        np.zeros(n_stars, np.int64),
        zeros(),
        zeros(),
        zeros(),
        zeros(3),
        zeros(others),
        zeros(others),
        zeros(2 + others),
        zeros(others, others),
        np.zeros((n_stars, others)),
        np.broadcast_to(FIRST_REACH * np.eye(others), (n_stars, others, others)).copy(),
    )


def log_normalisation(n_others: int) -> float:
    """Return what `log_proposal_density` leaves out: the log normalisation of the others' t."""
    return float(np.log(gamma(0.5 * (TAIL + n_others)) / gamma(0.5 * TAIL)) - 0.5 * n_others * np.log(pi * TAIL))


class Scratch(NamedTuple):
    """Buffers for L positions of one star: uniforms of heat, A_V, the t's scale, which t, and the normals; and places.

    Loops run over positions within loops over coordinates, few arrays at a time, so that they fill vector lanes.

    Attributes
    ----------
    knot, spot, width
        (L,): the knot below, the share of the way to the next, and how far that is.
    location, middle, scale
        (L,): of A_V's cut logistic there.
    x, y
        (M, L): the others standardised by the first t and by the second.
    rooms
        (3, L), for whatever is needed.
    """

    uniforms: NDArray[np.float64]
    normals: NDArray[np.float64]
    knot: NDArray[np.uint64]
    spot: NDArray[np.float64]
    width: NDArray[np.float64]
    location: NDArray[np.float64]
    middle: NDArray[np.float64]
    scale: NDArray[np.float64]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    rooms: NDArray[np.float64]


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
        np.empty(lanes),
        np.empty((n_others, lanes)),
        np.empty((n_others, lanes)),
        np.empty((3, lanes)),
    )


@kernel
def other_axis(m, fit_av):
    """Return the coordinate of a walker that is the m-th of the others: glow, then what follows A_V."""
    return 1 + m + (1 if fit_av and m > 0 else 0)


@kernel
def find_last_at_most(values, n, wanted, out):
    """Write (L,) for each value wanted (L,) the last of the first n - 1 ascending values that is not above it, or 0."""
    top = np.uint64(n - 2)
    out[:] = np.uint64(0)
    step = np.uint64(1)
    while step < top:
        step *= np.uint64(2)
    while step > 0:
        for i in range(out.size):
            place = min(out[i] + step, top)
            out[i] = place if values[place] <= wanted[i] else out[i]
        step >>= np.uint64(1)


@kernel
def _linear(values, knot, spot, out):
    """Write what is linear between knots (K,)."""
    one = np.uint64(1)
    for i in range(out.size):
        k = knot[i]
        out[i] = values[k] + spot[i] * (values[k + one] - values[k])


@kernel
def _cubic(values, tangents, scratch, out):
    """Write what is cubic between knots (K,), by values and derivatives at both (Hermite)."""
    knot, spot, width, bend = scratch.knot, scratch.spot, scratch.width, scratch.rooms[2]
    one = np.uint64(1)
    for i in range(out.size):
        k, s = knot[i], spot[i]
        bend[i] = ((1.0 - s) * tangents[k] - s * tangents[k + one]) * width[i]
    for i in range(out.size):
        k, s = knot[i], spot[i]
        rise = values[k + one] - values[k]
        out[i] = values[k] + s * (rise + (1.0 - s) * (bend[i] - (1.0 - 2.0 * s) * rise))


@kernel
def draw_independent(proposal, star, fit_av, stream, scratch, out):
    """Write L draws (L, ndim) of a star's proposal, and leave in ``scratch`` where they are."""
    fill_uniform(stream, scratch.uniforms)
    fill_normal(scratch.uniforms[FIRST_NORMAL:], scratch.normals)
    _draw_heat(proposal, star, scratch, out)
    if fit_av:
        _locate_av(proposal, star, scratch)
        uniform, location, scale = scratch.uniforms[1], scratch.location, scratch.scale
        for i in range(uniform.size):
            survival = uniform[i] / (1.0 + exp(-location[i] / scale[i]))
            out[i, 2] = max(location[i] + scale[i] * log((1.0 - survival) / survival), 0.0)
    _draw_standard(proposal, star, scratch)
    _place_others(proposal, star, fit_av, scratch, out)


@kernel
def _draw_heat(proposal, star, scratch, out):
    mass, log_density, heat = proposal.mass[star], proposal.log_density[star], proposal.heat[star]
    uniform, knot, spot, width = scratch.uniforms[0], scratch.knot, scratch.spot, scratch.width
    rise = scratch.rooms[0]
    one = np.uint64(1)
    find_last_at_most(mass, proposal.n_knots[star], uniform, knot)
    for i in range(uniform.size):
        k = knot[i]
        spot[i] = (uniform[i] - mass[k]) / (mass[k + one] - mass[k])
    for i in range(uniform.size):
        k = knot[i]
        rise[i] = log_density[k + one] - log_density[k]
    for i in range(uniform.size):
        bent = log(max(1.0 + spot[i] * (exp(rise[i]) - 1.0), 1e-300)) / rise[i]
        spot[i] = min(max(bent if abs(rise[i]) > 1e-5 else spot[i], 0.0), 1.0)
    for i in range(uniform.size):
        k = knot[i]
        width[i] = heat[k + one] - heat[k]
        out[i, 0] = heat[k] + spot[i] * width[i]


@kernel
def _locate_av(proposal, star, scratch):
    """Write location, mean and scale of A_V's cut logistic."""
    av, tangent = proposal.av[star], proposal.tangent[star]
    _cubic(av[0], tangent[0], scratch, scratch.location)
    _cubic(av[1], tangent[1], scratch, scratch.middle)
    _linear(av[2], scratch.knot, scratch.spot, scratch.scale)
    for i in range(scratch.scale.size):
        # A cubic may overshoot; further down every draw would be exactly zero.
        scratch.location[i] = max(scratch.location[i], -50.0 * scratch.scale[i])


@kernel
def _draw_standard(proposal, star, scratch):
    """Write the others' standardised coordinates, half of them by the second t.

    A t is a normal times sqrt(8 / chi2), whose chi-square is -2 ln of a product of four uniforms.
    """
    uniforms, normals, x = scratch.uniforms, scratch.normals, scratch.x
    mean, learnt = proposal.learnt_mean[star], proposal.learnt_factor[star]
    spread, value = scratch.rooms[0], scratch.rooms[1]
    for i in range(spread.size):
        spread[i] = (uniforms[2, i] * uniforms[3, i]) * (uniforms[4, i] * uniforms[5, i])
    for i in range(spread.size):
        spread[i] = np.sqrt(TAIL / (-2.0 * log(spread[i])))
    for m in range(x.shape[0]):
        value[:] = 0.0
        for j in range(m + 1):
            for i in range(spread.size):
                value[i] += learnt[m, j] * normals[j, i]
        for i in range(spread.size):
            x[m, i] = spread[i] * normals[m, i] if uniforms[6, i] < 0.5 else mean[m] + spread[i] * value[i]


@kernel
def _place_others(proposal, star, fit_av, scratch, out):
    """Turn standardised coordinates into positions."""
    x, factor, room = scratch.x, proposal.factor[star], scratch.rooms[1]
    value = scratch.rooms[0]
    for m in range(x.shape[0]):
        axis = other_axis(m, fit_av)
        _centre(proposal, star, fit_av, m, scratch, out, value)
        for j in range(m + 1):
            _linear(factor[m, j], scratch.knot, scratch.spot, room)
            for i in range(value.size):
                value[i] += room[i] * x[j, i]
        for i in range(value.size):
            out[i, axis] = value[i]


@kernel
def _centre(proposal, star, fit_av, m, scratch, coords, out):
    """Write the place of the m-th of the other coordinates at the positions' heat and A_V."""
    _cubic(proposal.centre[star, m], proposal.tangent[star, 2 + m], scratch, out)
    if fit_av:
        slope, middle = scratch.rooms[1], scratch.middle
        _linear(proposal.slope[star, m], scratch.knot, scratch.spot, slope)
        for i in range(out.size):
            out[i] += slope[i] * (coords[i, 2] - middle[i])


@kernel
def log_proposal_density(proposal, star, fit_av, coords, scratch, out):
    """Write the log density (L,) of a star's proposal at positions (L, ndim), less `log_normalisation`."""
    locate(proposal, star, fit_av, coords, scratch)
    log_density_there(proposal, star, fit_av, coords, scratch, out)


@kernel
def locate(proposal, star, fit_av, coords, scratch):
    """Write where positions are to ``scratch``, and the others' standardised coordinates to its ``x``."""
    heat, knot, spot, width = proposal.heat[star], scratch.knot, scratch.spot, scratch.width
    one = np.uint64(1)
    for i in range(spot.size):
        spot[i] = coords[i, 0]
    find_last_at_most(heat, proposal.n_knots[star], spot, knot)
    for i in range(spot.size):
        k = knot[i]
        width[i] = heat[k + one] - heat[k]
        spot[i] = min(max((spot[i] - heat[k]) / width[i], 0.0), 1.0)
    if fit_av:
        _locate_av(proposal, star, scratch)
    x, factor, room = scratch.x, proposal.factor[star], scratch.rooms[1]
    value = scratch.rooms[0]
    for m in range(x.shape[0]):
        axis = other_axis(m, fit_av)
        _centre(proposal, star, fit_av, m, scratch, coords, value)
        for i in range(spot.size):
            value[i] = coords[i, axis] - value[i]
        for j in range(m):
            _linear(factor[m, j], knot, spot, room)
            for i in range(spot.size):
                value[i] -= room[i] * x[j, i]
        _linear(factor[m, m], knot, spot, room)
        for i in range(spot.size):
            x[m, i] = value[i] / room[i]


@kernel
def log_density_there(proposal, star, fit_av, coords, scratch, out):
    """Write the log density as `log_proposal_density` does, where ``scratch`` knows the positions."""
    density, volume = scratch.rooms[0], scratch.rooms[1]
    _t_mixture(proposal, star, scratch, density)
    for m in range(scratch.x.shape[0]):
        _linear(proposal.factor[star, m, m], scratch.knot, scratch.spot, volume)
        for i in range(density.size):
            density[i] /= volume[i]
    if fit_av:
        location, scale = scratch.location, scratch.scale
        for i in range(density.size):
            tail = exp((location[i] - coords[i, 2]) / scale[i])
            density[i] *= tail / (scale[i] * (1.0 + tail) * (1.0 + tail))
        for i in range(density.size):
            density[i] *= 1.0 + exp(-location[i] / scale[i])
    _linear(proposal.log_density[star], scratch.knot, scratch.spot, out)
    for i in range(density.size):
        out[i] += log(max(density[i], 1e-300))


@kernel
def _t_mixture(proposal, star, scratch, out):
    """Write the density of the mixture of the two t at standardised coordinates, less its normalisation."""
    x, y, distance2, power = scratch.x, scratch.y, scratch.rooms[1], scratch.rooms[2]
    mean, learnt = proposal.learnt_mean[star], proposal.learnt_factor[star]
    volume = 1.0
    distance2[:] = 0.0
    for m in range(x.shape[0]):
        for i in range(out.size):
            distance2[i] += x[m, i] * x[m, i]
    _t_density(distance2, x.shape[0], power)
    for i in range(out.size):
        out[i] = 0.5 * power[i]
    distance2[:] = 0.0
    for m in range(x.shape[0]):
        volume *= learnt[m, m]
        for i in range(out.size):
            y[m, i] = x[m, i] - mean[m]
        for j in range(m):
            for i in range(out.size):
                y[m, i] -= learnt[m, j] * y[j, i]
        for i in range(out.size):
            y[m, i] /= learnt[m, m]
            distance2[i] += y[m, i] * y[m, i]
    _t_density(distance2, x.shape[0], power)
    for i in range(out.size):
        out[i] += 0.5 / volume * power[i]


@kernel
def _t_density(distance2, n_others, out):
    """Write (1 + d / 8) to the power -(8 + n_others) / 2 of squared distances d, which are used up."""
    for i in range(out.size):
        inverse = 1.0 / (1.0 + distance2[i] / TAIL)
        out[i] = (inverse * inverse) * (inverse * inverse)
        distance2[i] = np.sqrt(inverse)
    for _ in range(n_others):
        for i in range(out.size):
            out[i] *= distance2[i]


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
        locate(proposal, star, fit_av, coords, scratch)
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

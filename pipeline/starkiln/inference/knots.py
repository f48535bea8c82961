"""Each star's posterior along temperature: a walk from its peaks, with a Laplace fit of all else at every knot."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import HALF_LN_2PI, exp, log, put
from starkiln.inference.compile import kernel
from starkiln.inference.posterior import LN_HEAT_K, Block, Grid, Prior, n_parameters
from starkiln.inference.proposal import FARTHEST_AV, Proposal, empty_proposal, other_axis
from starkiln.inference.start import (
    MAX_MODES,
    Modes,
    cholesky,
    clamp,
    damped,
    inverse_positive,
    make_slopes,
    one_star,
    slopes,
    solve_positive,
)

MAX_KNOTS = 64
WALK = 24  # knots on each side of a peak
DEPTH = 14.0  # the marginal is followed down to exp(-14) of its peak
BEYOND = 8.0  # and falls so much again towards the bounds of the temperature
FIRST_STEP = 0.6  # in standard deviations
HALVINGS = 4  # of a step, before a leap is taken for one
SAME = 1e-6  # relative difference of heat below which two knots are one
LONGEST = 0.15  # step, of the heat itself
BENT = 2.0  # a climb from the straight way to a knot that shows the way to be bent
STEEP, FLAT = 3.0, 0.5  # changes of the log marginal between knots that are too large, or smaller than need be
STRETCH = 1.05  # of all scatter: a proposal should be the wider one
LOGISTIC_SCALE = 1.81  # pi / sqrt(3), the standard deviation of a logistic of scale one

HEAT, DUST = np.int64(0), np.int64(2)  # axes of a walker; plain numbers would be compiled for one by one


class Knots(NamedTuple):
    """What a walk along one star's posterior leaves at K = MAX_KNOTS knots, M coordinates besides heat and A_V.

    Attributes
    ----------
    heat, log_marginal
        (K,): 1e4 K / T, and the log of its marginal density, up to a constant.
    av
        (K, 3): location, mean and scale of A_V's cut logistic in magnitudes.
    centre, slope
        (K, M): means of the others at the mean A_V, and their change with A_V.
    factor
        (K, M, M): lower Cholesky factors of their scatter.
    """

    heat: NDArray[np.float64]
    log_marginal: NDArray[np.float64]
    av: NDArray[np.float64]
    centre: NDArray[np.float64]
    slope: NDArray[np.float64]
    factor: NDArray[np.float64]


def fit_proposal(block: Block, grid: Grid, prior: Prior, modes: Modes) -> Proposal:
    """Return each star's proposal from the peaks of its posterior."""
    proposal = empty_proposal(block.n_bands.size, MAX_KNOTS + 2, n_parameters(grid, prior), prior.fit_av)
    _fit_all(block, grid, prior, modes, proposal)
    return proposal


@kernel
def _fit_all(block, grid, prior, modes, proposal):
    others = proposal.centre.shape[1]
    knots = Knots(
        np.empty(MAX_KNOTS),
        np.empty(MAX_KNOTS),
        np.empty((MAX_KNOTS, 3)),
        np.empty((MAX_KNOTS, others)),
        np.empty((MAX_KNOTS, others)),
        np.empty((MAX_KNOTS, others, others)),
    )
    for star in range(block.n_bands.size):
        one = one_star(block, star)
        n = _walk_all(one, grid, prior, modes, star, knots)
        _lay_out(knots, n, prior, proposal, star)


@kernel
def _walk_all(one, grid, prior, modes, star, knots):
    """Walk both ways from every peak that no walk has passed; return the number of knots."""
    ndim = modes.coords.shape[2]
    here, there = make_slopes(ndim, grid.loading.shape[0]), make_slopes(ndim, grid.loading.shape[0])
    n = np.int64(0)
    best = -np.inf
    low, high = np.full(MAX_MODES, np.inf), np.full(MAX_MODES, -np.inf)
    for mode in range(max(modes.n_modes[star], 1)):
        peak = modes.coords[star, mode].copy()
        low_peak = modes.log_density[star, mode] < modes.log_density[star, 0] - DEPTH
        if low_peak or n >= MAX_KNOTS - 2 or _is_passed(peak[0], low, high):
            continue
        value, _, here, there = _climb_beside(one, grid, prior, peak, here, there)
        first = n
        knots.log_marginal[n] = _condition(peak, here, value, prior, knots, n)
        best = max(best, knots.log_marginal[n])
        n += 1
        for direction in (-1.0, 1.0):
            n, best = _walk(
                one, grid, prior, peak, modes.covariance[star, mode], direction, here, there, knots, first, n, best
            )
        for k in range(first, n):
            low[mode], high[mode] = min(low[mode], knots.heat[k]), max(high[mode], knots.heat[k])
    return n


@kernel
def _is_passed(heat, low, high):
    found = False
    for k in range(low.size):
        found |= low[k] < heat < high[k]
    return found


@kernel
def _walk(one, grid, prior, peak, covariance, direction, here, there, knots, first, n, best):
    """Walk from a peak until the marginal is low, a bound, or a knot of an earlier walk.

    The peak's own knot is the ``first``; ``n`` and ``best`` are how many knots there are, and their highest marginal.
    """
    ndim = peak.size
    heat_low = exp(LN_HEAT_K - prior.ln_teff_max) * (1.0 + 1e-9)
    heat_high = exp(LN_HEAT_K - prior.ln_teff_min) * (1.0 - 1e-9)
    point, trial, tangent = peak.copy(), np.empty(ndim), np.empty(ndim)
    for k in range(ndim):
        tangent[k] = covariance[0, k] / covariance[0, 0]
    step = min(FIRST_STEP * np.sqrt(covariance[0, 0]), LONGEST * point[0])
    before = knots.log_marginal[first]
    last = min(n + WALK, MAX_KNOTS)
    tries = 0
    while n < last:
        heat = min(max(point[0] + direction * step, heat_low), heat_high)
        if heat == point[0] or _passes_earlier(knots, first, point[0], heat):
            break
        trial[0] = heat
        for k in range(1, ndim):
            trial[k] = point[k] + tangent[k] * (heat - point[0])
        value, gain, here, there = _climb_beside(one, grid, prior, trial, here, there)
        marginal = _condition(trial, here, value, prior, knots, n)
        change = abs(before - marginal)
        if (change > STEEP or gain > BENT) and tries < HALVINGS:
            step *= 0.5
            tries += 1
            continue
        if tries == HALVINGS:
            step *= 2.0**HALVINGS  # a leap between branches: no step is short enough
        for k in range(1, ndim):
            tangent[k] = (trial[k] - point[k]) / (heat - point[0])
        # Longer where the way is flat and straight, shorter before it gets so steep that a knot is refused.
        if change < FLAT and gain < 0.2 * BENT:
            step *= 1.5
        elif change > 0.6 * STEEP:
            step *= 0.7
        step = min(step, LONGEST * heat)
        knots.log_marginal[n] = marginal
        put(trial, point)
        before, tries = marginal, 0
        best = max(best, marginal)
        n += 1
        if marginal < best - DEPTH or heat <= heat_low or heat >= heat_high:
            break
    return n, best


@kernel
def _passes_earlier(knots, first, start, end):
    found = False
    for k in range(first):
        found |= (knots.heat[k] - start) * (knots.heat[k] - end) < 0.0
    return found


@kernel
def _climb_beside(one, grid, prior, point, here, there):
    """Climb at fixed heat; move ``point``, and return its log density, by how much it rose, and its slopes first."""
    ndim = point.size
    trial = np.empty(ndim)
    clamp(prior, point)
    start = best = slopes(one, grid, prior, point, here)
    damping = 1e-4
    for _ in range(8):
        step = _step_beside(here, point, prior, damping)
        trial[0] = point[0]
        for k in range(1, ndim):
            trial[k] = point[k] + step[k]
        clamp(prior, trial)
        value = slopes(one, grid, prior, trial, there)
        if value > best:
            gain = value - best
            best = value
            put(trial, point)
            here, there = there, here
            damping *= 0.1
            if gain < 0.02:
                break
        else:
            damping = max(100.0 * damping, 1e-2)
            if damping > 1e3:
                break
    return best, best - start, here, there


@kernel
def _step_beside(here, point, prior, damping):
    """Return a damped Newton step without heat; A_V stops at zero and the others go on along it."""
    matrix = damped(here.curvature, damping)
    force = here.gradient.copy()
    _hold(matrix, force, HEAT, 0.0)
    step = solve_positive(matrix, force)
    if prior.fit_av and point[DUST] + step[DUST] < 0.0:
        _hold(matrix, force, DUST, -point[DUST])
        step = solve_positive(matrix, force)
    return step


@kernel
def _hold(matrix, force, k, step):
    """Change a system of equations so that the k-th step is given."""
    for m in range(force.size):
        if m != k:
            force[m] -= matrix[m, k] * step
            matrix[m, k] = 0.0
            matrix[k, m] = 0.0
    matrix[k, k] = 1.0
    force[k] = step


@kernel
def _condition(point, here, value, prior, knots, n):
    """Write what everything but heat is like at a knot, and return the log marginal of heat.

    With g and A the gradient and the curvature at a point, all else is normal about its place plus C g, C = 1 / A, and
    its mass is exp(log density + g C g / 2) / sqrt(det A), times the chance of A_V > 0.
    """
    ndim = point.size
    inner, force = np.empty((ndim - 1, ndim - 1)), np.empty(ndim - 1)
    for k in range(1, ndim):
        force[k - 1] = here.gradient[k]
        for m in range(1, ndim):
            inner[k - 1, m - 1] = here.curvature[k, m]
    shift = solve_positive(inner, force)
    root = cholesky(inner)
    marginal = value
    for k in range(ndim - 1):
        marginal += 0.5 * force[k] * shift[k] - log(root[k, k])
    knots.heat[n] = point[0]
    if prior.fit_av:
        covariance = inverse_positive(inner)
        sigma = np.sqrt(covariance[1, 1])
        peak = point[2] + shift[1]
        marginal += _cut_at_zero(peak, sigma, knots.av[n])
    _others(point, shift, inner, prior, knots, n)
    return marginal


@kernel
def _cut_at_zero(peak, sigma, logistic):
    """Write location, mean and scale of a logistic like a normal cut at zero, and return the log of the mass left.

    The normal's upper tail is Börjesson & Sundberg's (1979, IEEE Trans. Commun. 27, 639; formula from memory), good to
    a per cent.
    """
    t = -peak / sigma
    u = abs(t)
    root = np.sqrt(u * u + 2.0 * np.pi)
    tail = exp(-0.5 * u * u) / np.sqrt(2.0 * np.pi) / ((1.0 - 1.0 / np.pi) * u + root / np.pi)
    if t > 0.0:
        # sigma (phi / tail - u), where the difference of near equals has been worked out.
        mean = sigma * 2.0 / (root + u)
        log_mass = -0.5 * u * u - HALF_LN_2PI - log((1.0 - 1.0 / np.pi) * u + root / np.pi)
    else:
        mean = peak + sigma * exp(-0.5 * u * u) / np.sqrt(2.0 * np.pi) / (1.0 - tail)
        log_mass = log(1.0 - tail)
    # Location over scale, for the scale that a normal so wide has; then the scale that gives a logistic the mean.
    ratio = min(max(-LOGISTIC_SCALE / STRETCH * t, FARTHEST_AV), 100.0)
    scale = mean / (log(1.0 + exp(ratio)) * (1.0 + exp(-ratio)))
    logistic[0], logistic[1], logistic[2] = ratio * scale, mean, scale
    return log_mass


@kernel
def _others(point, shift, inner, prior, knots, n):
    """Write centre, slope with A_V and scatter of the coordinates other than heat and A_V."""
    others = knots.centre.shape[1]
    reduced, coupling = np.empty((others, others)), np.zeros(others)
    for m in range(others):
        a = other_axis(m, prior.fit_av) - 1
        if prior.fit_av:
            coupling[m] = -inner[a, 1]
        for j in range(others):
            b = other_axis(j, prior.fit_av) - 1
            reduced[m, j] = inner[a, b]
    slope = solve_positive(reduced, coupling)
    scatter = inverse_positive(reduced)
    for m in range(others):
        for j in range(others):
            scatter[m, j] *= STRETCH * STRETCH
    lower = cholesky(scatter)
    for m in range(others):
        put(lower[m], knots.factor[n, m])
    for m in range(others):
        a = other_axis(m, prior.fit_av) - 1
        knots.slope[n, m] = slope[m]
        knots.centre[n, m] = point[1 + a] + shift[a]
        if prior.fit_av:
            knots.centre[n, m] += slope[m] * (knots.av[n, 1] - point[2] - shift[1])


@kernel
def _lay_out(knots, n, prior, proposal, star):
    """Sort the knots, add the bounds of the temperature, and normalise."""
    heat_low = exp(LN_HEAT_K - prior.ln_teff_max)
    heat_high = exp(LN_HEAT_K - prior.ln_teff_min)
    order = _ascending(knots.heat, n)
    best = -np.inf
    for k in range(n):
        best = max(best, knots.log_marginal[k])
    heat, log_density, mass = proposal.heat[star], proposal.log_density[star], proposal.mass[star]
    count = np.int64(1)
    for source in order:
        if count == 1 or knots.heat[source] > heat[count - 1] * (1.0 + SAME):
            _copy_knot(knots, source, best, proposal, star, count)
            count += 1
    _copy_knot(knots, order[0], best, proposal, star, np.int64(0))
    _copy_knot(knots, order[n - 1], best, proposal, star, count)
    heat[0], heat[count] = heat_low * (1.0 - SAME), heat_high * (1.0 + SAME)
    log_density[0] = min(log_density[0] - BEYOND, -DEPTH)
    log_density[count] = min(log_density[count] - BEYOND, -DEPTH)
    n = count + 1
    proposal.n_knots[star] = n
    for m in range(2):
        _tangents(heat, proposal.av[star, m], n, proposal.tangent[star, m])
    for m in range(proposal.centre.shape[1]):
        _tangents(heat, proposal.centre[star, m], n, proposal.tangent[star, 2 + m])
    normalise(heat, log_density, mass, n)


@kernel
def _ascending(values, n):
    """Return the order that sorts the first n values."""
    order = np.empty(n, dtype=np.int64)
    for i in range(n):
        order[i] = i
        k = i
        while k > 0 and values[order[k - 1]] > values[order[k]]:
            order[k - 1], order[k] = order[k], order[k - 1]
            k -= 1
    return order


@kernel
def _copy_knot(knots, source, best, proposal, star, target):
    proposal.heat[star, target] = knots.heat[source]
    proposal.log_density[star, target] = max(knots.log_marginal[source] - best, -DEPTH - BEYOND)
    for m in range(3):
        proposal.av[star, m, target] = knots.av[source, m]
    for m in range(knots.factor.shape[1]):
        proposal.centre[star, m, target] = knots.centre[source, m]
        proposal.slope[star, m, target] = knots.slope[source, m]
        for j in range(m + 1):
            proposal.factor[star, m, j, target] = knots.factor[source, m, j]


@kernel
def _tangents(heat, values, n, out):
    """Write the derivatives at the knots, each of the parabola through a knot and its neighbours.

    They are one-sided beside the end knots, which are copies of their neighbours, and zero at these.
    """
    out[0] = out[n - 1] = 0.0
    for k in range(1, n - 1):
        left, right = heat[k] - heat[k - 1], heat[k + 1] - heat[k]
        before, after = (values[k] - values[k - 1]) / left, (values[k + 1] - values[k]) / right
        if k == 1:
            out[k] = after
        elif k == n - 2:
            out[k] = before
        else:
            out[k] = (right * before + left * after) / (left + right)


@kernel
def normalise(heat, log_density, mass, n):
    """Write the cumulative mass (n,) of a marginal that is exponential between knots, and normalise its log density."""
    mass[0] = 0.0
    for k in range(n - 1):
        rise = log_density[k + 1] - log_density[k]
        mean = (exp(rise) - 1.0) / rise if abs(rise) > 1e-5 else 1.0 + 0.5 * rise
        mass[k + 1] = mass[k] + (heat[k + 1] - heat[k]) * exp(log_density[k]) * mean
    total = mass[n - 1]
    for k in range(n):
        mass[k] /= total
        log_density[k] -= log(total)

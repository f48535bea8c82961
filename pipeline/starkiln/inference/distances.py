"""Distances drawn exactly for each photometric draw, given the parallax and the bounds on the radius.

With ln R uniform, photometry and parallax factorise but for the bounds on R, which tie (R/d)^2 and d. So
each draw of Omega gets a distance from the parallax posterior cut to R_min <= d sqrt(Omega) <= R_max, and
counts by the mass that the cut left.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp
from starkiln.inference.compile import kernel
from starkiln.inference.streams import uniform

NODES = 1024
GUIDES = 1024  # a power of two, so that the guide of a mass is exact
COARSE = 256
DEPTH = 40.0  # the density is followed down to exp(-40) of its peak
NONE, PARALLAX, GAUSSIAN = 0, 1, 2


class DistanceData(NamedTuple):
    """What is known of each star's distance, all (K,).

    Attributes
    ----------
    kind
        NONE, PARALLAX (value and error in mas) or GAUSSIAN (in pc).
    """

    kind: NDArray[np.int64]
    value: NDArray[np.float64]
    error: NDArray[np.float64]
    length_scale_pc: NDArray[np.float64]


class DistanceDraws(NamedTuple):
    """Joint draws: which photometric draw each is, and its distance.

    Attributes
    ----------
    source
        (K, N) int64, the photometric draw each joint draw takes.
    ln_dist_pc
        (K, N); NaN without a parallax.
    kept_share
        (K,): effective share of draws left by the weights, 1 where the bounds on R do not bite.
    """

    source: NDArray[np.int64]
    ln_dist_pc: NDArray[np.float64]
    kept_share: NDArray[np.float64]


def draw_distances(
    ln_omega: NDArray[np.float64],
    data: DistanceData,
    bounds_pc: tuple[float, float],
    ln_radius_bounds_pc: tuple[float, float],
    streams: NDArray[np.uint64],
) -> DistanceDraws:
    """Draw a distance for every photometric draw.

    Parameters
    ----------
    ln_omega
        (K, N) draws of ln (R/d)^2.
    ln_radius_bounds_pc
        Logarithms of the bounds on R in parsecs.
    streams
        (K, 4) uint64, advanced in place.
    """
    shape = ln_omega.shape
    draws = DistanceDraws(np.empty(shape, np.int64), np.empty(shape), np.ones(shape[0]))
    _draw(ln_omega, data, np.log(bounds_pc), np.array(ln_radius_bounds_pc), streams, draws)
    return draws


@kernel
def log_density_of_ln(s, kind, value, error, length_scale_pc):
    """Return the log density of s = ln(d / pc), unnormalised."""
    d = exp(s)
    if kind == PARALLAX:
        pull = (value - 1e3 / d) / error
        return 3.0 * s - d / length_scale_pc - 0.5 * pull * pull
    pull = (value - d) / error
    return s - 0.5 * pull * pull


@kernel
def _likely_ln(kind, value, error, low, high):
    """Return a point on the likelihood's own peak, which a coarse grid may miss when it is narrow."""
    guess = 1000.0 / max(value, 0.1 * error) if kind == PARALLAX else max(value, 0.1 * error)
    return min(max(np.log(guess), low), high)


@kernel
def _window(kind, value, error, length_scale_pc, low, high):
    """Return the peak log density and the range of s in which it is within DEPTH of the peak."""
    likely = _likely_ln(kind, value, error, low, high)
    points = np.empty(COARSE + 1)
    for i in range(COARSE):
        points[i] = low + (high - low) * i / (COARSE - 1)
    place = COARSE
    while place > 0 and points[place - 1] > likely:
        points[place] = points[place - 1]
        place -= 1
    points[place] = likely
    height = np.empty(COARSE + 1)
    best = -np.inf
    for i in range(COARSE + 1):
        height[i] = log_density_of_ln(points[i], kind, value, error, length_scale_pc)
    _raise_peak(kind, value, error, length_scale_pc, points, height)
    for i in range(COARSE + 1):
        best = max(best, height[i])
    first, last = 0, COARSE
    while height[first] < best - DEPTH:
        first += 1
    while height[last] < best - DEPTH:
        last -= 1
    left, right = points[first], points[last]
    if first > 0:
        left = _crossing(points[first - 1], left, best - DEPTH, kind, value, error, length_scale_pc)
    if last < COARSE:
        right = _crossing(points[last + 1], right, best - DEPTH, kind, value, error, length_scale_pc)
    return best, left, right


@kernel
def _raise_peak(kind, value, error, length_scale_pc, points, height):
    """Move the highest point to the peak itself, by golden section between its neighbours."""
    top = 0
    for i in range(height.size):
        if height[i] > height[top]:
            top = i
    a, b = points[max(top - 1, 0)], points[min(top + 1, points.size - 1)]
    ratio = 0.6180339887498949
    for _ in range(60):
        c, d = b - ratio * (b - a), a + ratio * (b - a)
        if log_density_of_ln(c, kind, value, error, length_scale_pc) > log_density_of_ln(
            d, kind, value, error, length_scale_pc
        ):
            b = d
        else:
            a = c
    peak = log_density_of_ln(0.5 * (a + b), kind, value, error, length_scale_pc)
    if peak > height[top]:
        points[top], height[top] = 0.5 * (a + b), peak


@kernel
def _crossing(outside, inside, level, kind, value, error, length_scale_pc):
    for _ in range(40):
        middle = 0.5 * (outside + inside)
        if log_density_of_ln(middle, kind, value, error, length_scale_pc) < level:
            outside = middle
        else:
            inside = middle
    return outside


@kernel
def _cumulative(best, left, right, kind, value, error, length_scale_pc, mass):
    """Write the normalised cumulative mass at NODES points, by the trapezium rule."""
    step = (right - left) / (NODES - 1)
    for i in range(NODES):
        mass[i] = exp(log_density_of_ln(left + step * i, kind, value, error, length_scale_pc) - best)
    before = mass[0]
    mass[0] = 0.0
    for i in range(1, NODES):
        here = mass[i]
        mass[i] = mass[i - 1] + 0.5 * (before + here)
        before = here
    total = mass[NODES - 1]
    for i in range(NODES):
        mass[i] /= total


@kernel
def _mass_at(s, left, right, mass):
    x = (s - left) / (right - left) * (NODES - 1)
    if x <= 0.0:
        return 0.0
    if x >= NODES - 1:
        return 1.0
    i = int(x)
    return mass[i] + (x - i) * (mass[i + 1] - mass[i])


@kernel
def _put_guides(mass, guide):
    """Write the last node of less mass than each multiple of 1 / GUIDES."""
    i = 0
    for k in range(GUIDES + 1):
        while i < NODES - 2 and mass[i + 1] < k * (1.0 / GUIDES):
            i += 1
        guide[k] = i


@kernel
def _ln_at_mass(target, left, right, mass, guide):
    i = guide[int(target * GUIDES)]
    while i < NODES - 2 and mass[i + 1] < target:
        i += 1
    width = mass[i + 1] - mass[i]
    fraction = (target - mass[i]) / width if width > 0.0 else 0.5
    return left + (right - left) * (i + min(max(fraction, 0.0), 1.0)) / (NODES - 1)


@kernel
def _draw(ln_omega, data, ln_bounds, ln_radius, streams, draws):
    n_stars, n_draws = ln_omega.shape
    mass = np.empty(NODES)
    guide = np.empty(GUIDES + 1, np.int64)
    lower = np.empty(n_draws)
    weight = np.empty(n_draws)
    for star in range(n_stars):
        for i in range(n_draws):
            draws.source[star, i] = i
        kind = data.kind[star]
        if kind == NONE:
            draws.ln_dist_pc[star] = np.nan
            continue
        value, error, scale = data.value[star], data.error[star], data.length_scale_pc[star]
        best, left, right = _window(kind, value, error, scale, ln_bounds[0], ln_bounds[1])
        _cumulative(best, left, right, kind, value, error, scale, mass)
        _put_guides(mass, guide)
        total = 0.0
        square = 0.0
        least = 1.0
        for i in range(n_draws):
            half = 0.5 * ln_omega[star, i]
            lower[i] = _mass_at(ln_radius[0] - half, left, right, mass)
            weight[i] = max(_mass_at(ln_radius[1] - half, left, right, mass) - lower[i], 0.0)
            total += weight[i]
            square += weight[i] * weight[i]
            least = min(least, weight[i])
        stream = streams[star]
        if total <= 0.0:
            # Parallax and bounds contradict each other: the nearest distance the bounds allow, flagged at bound.
            draws.kept_share[star] = 0.0
            for i in range(n_draws):
                half = 0.5 * ln_omega[star, i]
                s = _ln_at_mass(uniform(stream), left, right, mass, guide)
                draws.ln_dist_pc[star, i] = min(max(s, ln_radius[0] - half), ln_radius[1] - half)
            continue
        draws.kept_share[star] = total * total / square / n_draws
        if least < 1.0 - 1e-9:
            _resample(weight, total, uniform(stream), draws.source[star])
        for i in range(n_draws):
            k = draws.source[star, i]
            target = lower[k] + uniform(stream) * weight[k]
            draws.ln_dist_pc[star, i] = _ln_at_mass(target, left, right, mass, guide)


@kernel
def _resample(weight, total, offset, source):
    """Write indices drawn in proportion to the weights, by systematic resampling."""
    n = weight.size
    step = total / n
    reached = weight[0]
    k = 0
    for i in range(n):
        target = (i + offset) * step
        while reached < target and k < n - 1:
            k += 1
            reached += weight[k]
        source[i] = k

"""How far a star's chain can be trusted: effective sample sizes, R-hat and autocorrelation.

Rank-normalised split statistics follow Vehtari, Gelman, Simpson, Carpenter & Bürkner (2021, Bayesian
Analysis 16, 667): each walker is cut into two half-chains; the sums of autocorrelations stop by Geyer's
initial monotone sequence. The walkers' plain autocorrelation time is the one of Goodman & Weare (2010),
with Sokal's window of five times itself.
"""

from __future__ import annotations

from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from starkiln.inference.compile import kernel
from starkiln.inference.fourier import all_products

WALKER_ERRORS = 6.0
WALKER_SPREADS = 0.5
SOKAL_WINDOW = 5.0
DIRECT_LAGS = 40  # are summed one by one in the time that Fourier transforms take for all lags
_NO_LAG, _NEXT_STEP = np.int64(0), np.int64(1)  # plain numbers would be compiled for beside other lags


class Convergence(NamedTuple):
    """Diagnostics of S stars, over P parameters each where two-dimensional.

    Attributes
    ----------
    ess_bulk, ess_tail, rhat, autocorr_steps
        (S, P); NaN where a chain did not move.
    stray_walker
        (S,) bool: a walker's mean lies WALKER_ERRORS standard errors and WALKER_SPREADS standard deviations from all.
    """

    ess_bulk: NDArray[np.float64]
    ess_tail: NDArray[np.float64]
    rhat: NDArray[np.float64]
    autocorr_steps: NDArray[np.float64]
    stray_walker: NDArray[np.bool_]

    def take(self, stars: NDArray[np.int64]) -> Convergence:
        """Return the diagnostics of some of the stars."""
        columns = {name: getattr(self, name)[stars] for name in self._fields}
        return Convergence(**columns)


@lru_cache(maxsize=32)
def _normal_scores(n: int) -> NDArray[np.float64]:
    """Blom's normal scores of the ranks 1, 1.5, 2 ... n, by twice the rank."""
    twice_rank = np.arange(2 * n + 2)
    return np.asarray(ndtri((np.clip(twice_rank, 2, 2 * n) / 2.0 - 0.375) / (n + 0.25)))


def autocorrelation_times(chain: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the walkers' integrated autocorrelation time in steps, (S, P), of chains (S, P, n, W)."""
    n_stars, n_parameters = chain.shape[:2]
    result = _empty_result(np.empty((n_stars, n_parameters)))
    _diagnose(_flat(chain), chain.shape[3], np.empty((n_stars, n_parameters, 0), np.int64), np.empty(0), result)
    return result.autocorr_steps


def _empty_result(autocorr_steps: NDArray[np.float64]) -> Convergence:
    shape = autocorr_steps.shape
    stray_walker = np.zeros(shape[0], dtype=np.bool_)
    return Convergence(np.empty(shape), np.empty(shape), np.empty(shape), autocorr_steps, stray_walker)


def _flat(chain: NDArray[np.float64]) -> NDArray[np.float64]:
    n_stars, n_parameters, n_steps, walkers = chain.shape
    return chain.reshape(n_stars, n_parameters, n_steps * walkers)


def diagnose(chain: NDArray[np.float64], order: NDArray[np.int64], autocorr_steps: NDArray[np.float64]) -> Convergence:
    """Diagnose the chains of a block of stars.

    Parameters
    ----------
    chain
        (S, P, n, W): n steps of W walkers, n even.
    order
        (S, P, n * W): the order that sorts each parameter's draws.
    autocorr_steps
        (S, P), as `autocorrelation_times` gives it.
    """
    result = _empty_result(autocorr_steps)
    _diagnose(_flat(chain), chain.shape[3], order, _normal_scores(order.shape[2]), result)
    return result


class _Scratch(NamedTuple):
    """Room for the half-chains of one parameter, C = 2 W of n / 2 steps; a column each.

    Attributes
    ----------
    draws
        (n W,), what is diagnosed: normal scores, or whether a draw lies in a tail.
    centred
        (n / 2, C): each half-chain minus its mean.
    mean, variance, column
        (C,); the last for sums down the columns.
    products, rho
        (n / 2,), by lag.
    """

    draws: NDArray[np.float64]
    centred: NDArray[np.float64]
    mean: NDArray[np.float64]
    variance: NDArray[np.float64]
    column: NDArray[np.float64]
    products: NDArray[np.float64]
    rho: NDArray[np.float64]


@kernel
def _make_scratch(n_steps, walkers):
    half, columns = n_steps // 2, 2 * walkers
    return _Scratch(
        np.empty(n_steps * walkers),
        np.empty((half, columns)),
        np.empty(columns),
        np.empty(columns),
        np.empty(columns),
        np.empty(half),
        np.empty(half),
    )


@kernel
def _diagnose(chain, walkers, order, scores, result):
    """Write the diagnostics of chains (S, P, n W); without an order, only their autocorrelation times."""
    # Both carry the Fourier transforms, which would be compiled twice for two kernels.
    if order.shape[2] == 0:
        _put_autocorrelation_times(chain, walkers, result.autocorr_steps)
    else:
        _put_diagnostics(chain, walkers, order, scores, result)


@kernel
def _put_autocorrelation_times(chain, walkers, out):
    for star in range(out.shape[0]):
        for p in range(out.shape[1]):
            out[star, p] = autocorrelation_time(chain[star, p], walkers)


@kernel
def _put_diagnostics(chain, walkers, order, scores, result):
    n = chain.shape[2]
    scratch = _make_scratch(n // walkers, walkers)
    # Sorted values, their distances from the median, and those sorted; an infinity at both ends.
    value, distance, folded = np.empty(n + 2), np.empty(n + 2), np.empty(n + 2)
    folded_order, first = np.empty(n, dtype=np.int64), np.empty(n, dtype=np.int64)
    for star in range(chain.shape[0]):
        for p in range(chain.shape[1]):
            draws, its_order, autocorr_steps = chain[star, p], order[star, p], result.autocorr_steps[star, p]
            _put_in_order(draws, its_order, value)
            _rank_scores(value, its_order, scores, first, scratch.draws)
            first_lag = _first_transformed_lag(autocorr_steps)
            within, total = _within_and_total(scratch)
            rhat = np.sqrt(total / within)
            result.ess_bulk[star, p] = _effective_size(scratch, within, total, first_lag)
            _fold(value, its_order, distance, folded, folded_order)
            _rank_scores(folded, folded_order, scores, first, scratch.draws)
            within, total = _within_and_total(scratch)
            result.rhat[star, p] = max(rhat, np.sqrt(total / within))
            low = _tail_size(draws, sorted_quantile(value, 0.05), scratch, first_lag)
            high = _tail_size(draws, sorted_quantile(value, 0.95), scratch, first_lag)
            result.ess_tail[star, p] = np.nan if np.isnan(low) or np.isnan(high) else min(low, high)
            if _has_stray_walker(draws, autocorr_steps, scratch.column):
                result.stray_walker[star] = True


@kernel
def _put_in_order(values, order, out):
    """Write sorted values between two infinities."""
    n = values.size
    out[0] = out[n + 1] = np.inf
    for i in range(n):
        out[i + 1] = values[order[i]]


@kernel
def sorted_quantile(value, probability):
    """Return a quantile of sorted values between two infinities, linear between order statistics."""
    last = value.size - 3
    position = probability * last
    low = int(position)
    fraction = position - low
    return value[low + 1] * (1.0 - fraction) + value[min(low + 1, last) + 1] * fraction


@kernel
def _rank_scores(value, order, scores, first, out):
    """Write the normal score of each draw's rank, ties sharing their mean rank.

    Parameters
    ----------
    value
        (n + 2,), sorted values between two infinities; ``order`` (n,) says whose they are.
    first
        (n,) int64, scratch.
    """
    # Half of all draws tie with another: selections, as branches would be mispredicted.
    n = order.size
    start = 0
    for i in range(n):
        start = start if value[i] == value[i + 1] else i
        first[i] = start
    last = n - 1
    for i in range(n - 1, -1, -1):
        last = last if value[i + 1] == value[i + 2] else i
        out[order[i]] = scores[first[i] + last + 2]


@kernel
def _fold(value, order, distance, folded, folded_order):
    """Write the sorted distances from the median and whose they are, by merging the two sides of the sorted values.

    The near half is merged from the median outwards and the far half from both ends inwards, at the same time.
    """
    n = order.size
    median = sorted_quantile(value, 0.5)
    for i in range(n + 2):
        distance[i] = abs(value[i] - median)
    left = (n + 1) // 2
    while left < n and value[left + 1] <= median:
        left += 1
    right = left + 1
    far_left, far_right = 1, n
    folded[0] = folded[n + 1] = np.inf
    for i in range(1, n - n // 2 + 1):
        is_left = distance[left] <= distance[right]
        near = left if is_left else right
        folded[i] = distance[near]
        folded_order[i - 1] = order[near - 1]
        left = max(left - is_left, 0)
        right = min(right + 1 - is_left, n + 1)
        is_left = distance[far_left] > distance[far_right]
        far = far_left if is_left else far_right
        folded[n + 1 - i] = distance[far]
        folded_order[n - i] = order[far - 1]
        far_left += is_left
        far_right -= 1 - is_left


@kernel
def _within_and_total(scratch):
    """Centre the half-chains of the draws; return their mean variance and the variance estimate of all."""
    draws, centred, mean, variance = scratch.draws, scratch.centred, scratch.mean, scratch.variance
    half, chains = centred.shape
    walkers = chains // 2
    mean[:] = 0.0
    variance[:] = 0.0
    for h in range(2):
        some, its_mean, its_variance = draws[h * half * walkers :], mean[h * walkers :], variance[h * walkers :]
        for t in range(half):
            step = some[t * walkers :]
            for w in range(walkers):
                its_mean[w] += step[w]
        for w in range(walkers):
            its_mean[w] /= half
        for t in range(half):
            step, row = some[t * walkers :], centred[t, h * walkers :]
            for w in range(walkers):
                row[w] = step[w] - its_mean[w]
                its_variance[w] += row[w] * row[w]
    for c in range(chains):
        variance[c] /= half - 1
    within, centre, between = 0.0, 0.0, 0.0
    for c in range(chains):
        within += variance[c]
        centre += mean[c]
    within /= chains
    centre /= chains
    for c in range(chains):
        gap = mean[c] - centre
        between += gap * gap
    between /= chains - 1
    return within, within * (half - 1) / half + between


@kernel
def _tail_size(draws, cut, scratch, first_lag):
    """Return the effective size of how many draws (n W,) lie below a cut."""
    for i in range(draws.size):
        scratch.draws[i] = 1.0 if draws[i] <= cut else 0.0
    within, total = _within_and_total(scratch)
    return _effective_size(scratch, within, total, first_lag)


@kernel
def _first_transformed_lag(tau):
    """Return the lag from which on Fourier transforms are used: the first where it is clear that many are needed."""
    return 1 if SOKAL_WINDOW * tau > DIRECT_LAGS else DIRECT_LAGS


@kernel
def _mean_autocovariance(scratch, lag, first_lag):
    """Return the autocovariance at a lag, over n, averaged over half-chains; lags are asked for in order, from 1."""
    if lag == first_lag:
        scratch.column[:] = 1.0
        all_products(scratch.centred, scratch.column, scratch.products)
    if lag < first_lag:
        _products(scratch.centred, lag, scratch.column)
        total = _sum(scratch.column)
    else:
        total = scratch.products[lag]
    return total / scratch.centred.size


@kernel
def _products(series, lag, out):
    """Write the sum of the products of values a lag apart, for each column of a series (n, C)."""
    out[:] = 0.0
    for t in range(series.shape[0] - lag):
        early, late = series[t], series[t + lag]
        for c in range(out.size):
            out[c] += early[c] * late[c]


@kernel
def _effective_size(scratch, within, total, first_lag):
    """Return the split effective sample size of the centred half-chains; NaN where nothing varies."""
    if not total > 0.0:
        return np.nan
    half = scratch.rho.size
    n_draws = float(scratch.centred.size)
    rho = scratch.rho
    rho[:] = 0.0
    rho[0] = 1.0
    rho[1] = 1.0 - (within - _mean_autocovariance(scratch, _NEXT_STEP, first_lag)) / total
    even, odd = 1.0, rho[1]
    t = 1
    while t < half - 3 and even + odd > 0.0:
        even = 1.0 - (within - _mean_autocovariance(scratch, t + 1, first_lag)) / total
        odd = 1.0 - (within - _mean_autocovariance(scratch, t + 2, first_lag)) / total
        if even + odd >= 0.0:
            rho[t + 1] = even
            rho[t + 2] = odd
        t += 2
    last = t - 2
    if even > 0.0:
        rho[last + 1] = even
    for k in range(1, last - 1, 2):
        if rho[k + 1] + rho[k + 2] > rho[k - 1] + rho[k]:
            rho[k + 1] = 0.5 * (rho[k - 1] + rho[k])
            rho[k + 2] = rho[k + 1]
    tau = -1.0 + rho[last + 1]
    for k in range(last + 1):
        tau += 2.0 * rho[k]
    return n_draws / max(tau, 1.0 / np.log10(n_draws))


@kernel
def autocorrelation_time(draws, walkers):
    """Return the integrated autocorrelation time in steps of draws (n W,), as emcee defines it."""
    n_steps = draws.size // walkers
    centred = np.empty((n_steps, walkers))
    column, square, weight = np.empty(walkers), np.empty(walkers), np.empty(walkers)
    products = np.empty(n_steps)
    _sum_columns(draws, column)
    for t in range(n_steps):
        step, row = draws[t * walkers :], centred[t]
        for w in range(walkers):
            row[w] = step[w] - column[w] / n_steps
    _products(centred, _NO_LAG, square)
    tau = 1.0
    first_lag = n_steps
    for lag in range(1, n_steps):
        if first_lag == n_steps and lag >= _first_transformed_lag(tau):
            for w in range(walkers):
                weight[w] = 1.0 / square[w]
            all_products(centred, weight, products)
            first_lag = lag
        correlation = 0.0
        if lag < first_lag:
            _products(centred, lag, column)
            for w in range(walkers):
                correlation += column[w] / square[w]
        else:
            correlation = products[lag]
        tau += 2.0 * correlation / walkers
        if lag >= SOKAL_WINDOW * tau or np.isnan(tau):
            break
    return tau


@kernel
def _sum_columns(draws, out):
    """Write the sum of each walker's draws (n W,)."""
    walkers = out.size
    out[:] = 0.0
    for t in range(draws.size // walkers):
        step = draws[t * walkers :]
        for w in range(walkers):
            out[w] += step[w]


@kernel
def _has_stray_walker(draws, tau, column):
    walkers = column.size // 2
    n_steps = draws.size // walkers
    total, square = column[:walkers], column[walkers:]
    _sum_columns(draws, total)
    centre = _sum(total) / draws.size
    square[:] = 0.0
    for t in range(n_steps):
        step = draws[t * walkers :]
        for w in range(walkers):
            gap = step[w] - centre
            square[w] += gap * gap
    spread = np.sqrt(_sum(square) / draws.size)
    limit = spread * max(WALKER_ERRORS * np.sqrt(max(tau, 1.0) / n_steps), WALKER_SPREADS)
    strays = False
    for w in range(walkers):
        strays |= abs(total[w] / n_steps - centre) > limit
    return strays


@kernel
def _sum(values):
    total = 0.0
    for i in range(values.size):
        total += values[i]
    return total

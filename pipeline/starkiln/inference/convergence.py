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

WALKER_ERRORS = 6.0
SOKAL_WINDOW = 5.0
NEXT = np.int64(1)
"""The lag of one step: for a plain 1, a kernel would be compiled a second time."""


class Convergence(NamedTuple):
    """Diagnostics of S stars, over P parameters each where two-dimensional.

    Attributes
    ----------
    ess_bulk, ess_tail, rhat, autocorr_steps
        (S, P); NaN where a chain did not move.
    stray_walker
        (S,) bool: a walker's mean lies WALKER_ERRORS standard errors from the others'.
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


@lru_cache(maxsize=8)
def _normal_scores(n: int) -> NDArray[np.float64]:
    """Blom's normal scores of the ranks 1, 1.5, 2 ... n, by twice the rank."""
    twice_rank = np.arange(2 * n + 2)
    return np.asarray(ndtri((np.clip(twice_rank, 2, 2 * n) / 2.0 - 0.375) / (n + 0.25)))


def autocorrelation_times(chain: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the walkers' integrated autocorrelation time in steps, (S, P), of chains (S, P, n, W)."""
    out = np.empty(chain.shape[:2])
    _autocorrelation_times(chain, out)
    return out


@kernel
def _autocorrelation_times(chain, out):
    for star in range(out.shape[0]):
        for p in range(out.shape[1]):
            out[star, p] = autocorrelation_time(chain[star, p])


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
    n_stars, n_parameters, n_steps, walkers = chain.shape
    shape = (n_stars, n_parameters)
    result = Convergence(
        np.empty(shape), np.empty(shape), np.empty(shape), autocorr_steps, np.zeros(n_stars, dtype=np.bool_)
    )
    _diagnose(chain, order, _normal_scores(n_steps * walkers), result)
    return result


@kernel
def _diagnose(chain, order, scores, result):
    n_stars, n_parameters, n_steps, walkers = chain.shape
    n = n_steps * walkers
    ranked = np.empty((n_steps, walkers))
    folded_order = np.empty(n, dtype=np.int64)
    folded = np.empty(n)
    for star in range(n_stars):
        for p in range(n_parameters):
            values = chain[star, p].ravel()
            _rank_scores(values, order[star, p], scores, ranked.ravel())
            rhat = split_rhat(ranked)
            result.ess_bulk[star, p] = split_ess(ranked)
            _fold(values, order[star, p], folded, folded_order)
            _rank_scores(folded, folded_order, scores, ranked.ravel())
            result.rhat[star, p] = max(rhat, split_rhat(ranked))
            tail = np.inf
            for probability in (0.05, 0.95):
                cut = sorted_quantile(values, order[star, p], probability)
                for t in range(n_steps):
                    for w in range(walkers):
                        ranked[t, w] = 1.0 if chain[star, p, t, w] <= cut else 0.0
                ess = split_ess(ranked)
                tail = min(tail, ess) if not (np.isnan(ess) or np.isnan(tail)) else np.nan
            result.ess_tail[star, p] = tail
            if _has_stray_walker(chain[star, p], result.autocorr_steps[star, p]):
                result.stray_walker[star] = True


@kernel
def sorted_quantile(values, order, probability):
    """Return a quantile, linear between order statistics."""
    position = probability * (values.size - 1)
    low = int(position)
    high = min(low + 1, values.size - 1)
    fraction = position - low
    return values[order[low]] * (1.0 - fraction) + values[order[high]] * fraction


@kernel
def _rank_scores(values, order, scores, out):
    """Write the normal score of each value's rank, ties sharing their mean rank."""
    n = values.size
    i = 0
    while i < n:
        j = i
        while j + 1 < n and values[order[j + 1]] == values[order[i]]:
            j += 1
        score = scores[i + j + 2]
        for k in range(i, j + 1):
            out[order[k]] = score
        i = j + 1


@kernel
def _fold(values, order, folded, folded_order):
    """Write |value - median| and the order that sorts it, by merging the two sides of the sorted values."""
    n = values.size
    median = sorted_quantile(values, order, 0.5)
    for i in range(n):
        folded[i] = abs(values[i] - median)
    left = 0
    while left < n and values[order[left]] <= median:
        left += 1
    right = left
    left -= 1
    for i in range(n):
        if right >= n or (left >= 0 and folded[order[left]] <= folded[order[right]]):
            folded_order[i] = order[left]
            left -= 1
        else:
            folded_order[i] = order[right]
            right += 1


@kernel
def _half_moments(draws, mean, variance):
    """Write the mean and the variance (n - 1) of each half-chain."""
    half = draws.shape[0] // 2
    walkers = draws.shape[1]
    for h in range(2):
        for w in range(walkers):
            mean[h, w] = 0.0
            variance[h, w] = 0.0
        for t in range(h * half, (h + 1) * half):
            for w in range(walkers):
                mean[h, w] += draws[t, w]
        for w in range(walkers):
            mean[h, w] /= half
        for t in range(h * half, (h + 1) * half):
            for w in range(walkers):
                variance[h, w] += (draws[t, w] - mean[h, w]) ** 2
        for w in range(walkers):
            variance[h, w] /= half - 1


@kernel
def _within_and_total(draws, mean, variance):
    """Return the mean variance within half-chains and the variance estimate of all."""
    half = draws.shape[0] // 2
    chains = mean.size
    _half_moments(draws, mean, variance)
    within, centre, between = 0.0, 0.0, 0.0
    for h in range(2):
        for w in range(mean.shape[1]):
            within += variance[h, w]
            centre += mean[h, w]
    within /= chains
    centre /= chains
    for h in range(2):
        for w in range(mean.shape[1]):
            between += (mean[h, w] - centre) ** 2
    between /= chains - 1
    return within, within * (half - 1) / half + between


@kernel
def split_rhat(draws):
    """Return the split R-hat of draws (n, W)."""
    mean = np.empty((2, draws.shape[1]))
    variance = np.empty((2, draws.shape[1]))
    within, total = _within_and_total(draws, mean, variance)
    return np.sqrt(total / within)


@kernel
def _mean_autocovariance(draws, mean, lag, buffer):
    """Return the autocovariance at a lag, over n, averaged over half-chains."""
    half = draws.shape[0] // 2
    walkers = draws.shape[1]
    total = 0.0
    for h in range(2):
        buffer[:] = 0.0
        for t in range(h * half, (h + 1) * half - lag):
            for w in range(walkers):
                buffer[w] += (draws[t, w] - mean[h, w]) * (draws[t + lag, w] - mean[h, w])
        for w in range(walkers):
            total += buffer[w]
    return total / (half * 2 * walkers)


@kernel
def split_ess(draws):
    """Return the split effective sample size of draws (n, W); NaN where nothing varies."""
    half = draws.shape[0] // 2
    mean = np.empty((2, draws.shape[1]))
    variance = np.empty((2, draws.shape[1]))
    buffer = np.empty(draws.shape[1])
    n_draws = 2.0 * half * draws.shape[1]
    within, total = _within_and_total(draws, mean, variance)
    if not total > 0.0:
        return np.nan
    rho = np.zeros(half)
    rho[0] = 1.0
    rho[1] = 1.0 - (within - _mean_autocovariance(draws, mean, NEXT, buffer)) / total
    even, odd = 1.0, rho[1]
    t = 1
    while t < half - 3 and even + odd > 0.0:
        even = 1.0 - (within - _mean_autocovariance(draws, mean, t + 1, buffer)) / total
        odd = 1.0 - (within - _mean_autocovariance(draws, mean, t + 2, buffer)) / total
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
def autocorrelation_time(draws):
    """Return the integrated autocorrelation time in steps of draws (n, W), as emcee defines it."""
    n_steps, walkers = draws.shape
    centred = np.empty((n_steps, walkers))
    zero = np.zeros(walkers)
    buffer = np.empty(walkers)
    for w in range(walkers):
        total = 0.0
        for t in range(n_steps):
            total += draws[t, w]
        for t in range(n_steps):
            centred[t, w] = draws[t, w] - total / n_steps
            zero[w] += centred[t, w] * centred[t, w]
    tau = 1.0
    for lag in range(1, n_steps):
        buffer[:] = 0.0
        for t in range(n_steps - lag):
            for w in range(walkers):
                buffer[w] += centred[t, w] * centred[t + lag, w]
        correlation = 0.0
        for w in range(walkers):
            correlation += buffer[w] / zero[w]
        tau += 2.0 * correlation / walkers
        if lag >= SOKAL_WINDOW * tau or np.isnan(tau):
            break
    return tau


@kernel
def _has_stray_walker(draws, tau):
    n_steps, walkers = draws.shape
    centre = 0.0
    square = 0.0
    for t in range(n_steps):
        for w in range(walkers):
            centre += draws[t, w]
    centre /= n_steps * walkers
    for t in range(n_steps):
        for w in range(walkers):
            square += (draws[t, w] - centre) ** 2
    error = np.sqrt(square / (n_steps * walkers) * max(tau, 1.0) / n_steps)
    for w in range(walkers):
        total = 0.0
        for t in range(n_steps):
            total += draws[t, w]
        if abs(total / n_steps - centre) > WALKER_ERRORS * error:
            return True
    return False

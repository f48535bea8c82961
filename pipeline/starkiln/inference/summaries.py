"""Quantiles, correlations and means of draws, star by star and in fixed order."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.compile import kernel

PROBABILITIES = (0.025, 0.16, 0.5, 0.84, 0.975)


def quantiles(draws: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the quantiles (K, 5) at PROBABILITIES of draws (K, N), linear between order statistics."""
    return sorted_quantiles(np.sort(draws, axis=-1))


def sorted_quantiles(ordered: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the `quantiles` (K, 5) of draws (K, N) that are sorted."""
    position = np.array(PROBABILITIES) * (ordered.shape[1] - 1)
    low = position.astype(np.int64)
    high = np.minimum(low + 1, ordered.shape[1] - 1)
    fraction = position - low
    return ordered[:, low] * (1.0 - fraction) + ordered[:, high] * fraction


def correlations(a: NDArray[np.float64], b: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the Pearson correlation (K,) of draws (K, N); NaN where either does not vary."""
    out = np.empty(len(a))
    _correlate(np.ascontiguousarray(a), np.ascontiguousarray(b), out)
    return out


@kernel
def _correlate(a, b, out):
    n = a.shape[1]
    for star in range(a.shape[0]):
        mean_a = 0.0
        mean_b = 0.0
        for i in range(n):
            mean_a += a[star, i]
            mean_b += b[star, i]
        mean_a /= n
        mean_b /= n
        aa = 0.0
        bb = 0.0
        ab = 0.0
        for i in range(n):
            da = a[star, i] - mean_a
            db = b[star, i] - mean_b
            aa += da * da
            bb += db * db
            ab += da * db
        out[star] = ab / np.sqrt(aa * bb) if aa * bb > 0.0 else np.nan


def means(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the mean (K,) of values (K, N), summed in order."""
    out = np.empty(len(values))
    _mean(values, out)
    return out


@kernel
def _mean(values, out):
    for star in range(values.shape[0]):
        total = 0.0
        for i in range(values.shape[1]):
            total += values[star, i]
        out[star] = total / values.shape[1]


def has_gap(ordered: NDArray[np.float64], share: float = 0.025) -> NDArray[np.bool_]:
    """Return whether draws (K, N), sorted, leave a gap as wide as half their 68 % half-interval.

    Only gaps with at least ``share`` of the draws on both sides count. A single Gaussian peak of a thousand draws
    has no gap above a tenth of that.
    """
    skip = int(share * ordered.shape[1])
    gaps = np.diff(ordered[:, skip : ordered.shape[1] - skip], axis=-1)
    interval = sorted_quantiles(ordered)
    return np.asarray(gaps.max(axis=-1) > 0.25 * (interval[:, 3] - interval[:, 1]))

"""Smooth curves of ln T through scattered reference points, their smoothness chosen by cross-validation.

Penalised cubic B-splines (Eilers & Marx 1996, Statistical Science 11, 89) on the nodes of the departures. All bands
share one smoothness: what is odd about a reference point, such as the rounding of its temperature, is odd in all of
its bands, and must be smoothed alike in all of them if colours are to stay right.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starkiln.physics.departures import LN_TEFF_NODES, LN_TEFF_STEP

FloatArray = NDArray[np.float64]

_ROBUST_STEPS = 10
_BIWEIGHT = 4.685  # in robust sigmas: 95 per cent efficient for Gaussian errors (Huber & Ronchetti 2009)
_MAD_TO_SIGMA = 1.4826
_SETTLED = 1e-4
_RIDGE = 1e-9  # keeps coefficients far from any point finite
SMOOTHNESS_TRIED: FloatArray = np.geomspace(1e-2, 1e2, 9)


def choose_smoothness(
    teff_k: ArrayLike, values: FloatArray, errors: FloatArray, tried: FloatArray = SMOOTHNESS_TRIED, folds: int = 5
) -> float:
    """Return the smoothness that predicts left-out points best, all bands together.

    Parameters
    ----------
    teff_k : array_like
        (n_points,) temperatures [K].
    values, errors : ndarray
        (n_points, n_bands): ln D and its error, NaN where missing.
    tried : ndarray
        The smoothnesses to choose from.
    folds : int
        Every ``folds``-th point, in order of temperature, is left out at a time.
    """
    order = np.argsort(np.asarray(teff_k), kind="stable")
    teff_k, values, errors = np.asarray(teff_k)[order], values[order], errors[order]
    fold = np.arange(len(teff_k)) % folds
    losses = [
        sum(_left_out_loss(teff_k, values, errors, fold == left_out, smoothness) for left_out in range(folds))
        for smoothness in tried
    ]
    return float(tried[int(np.argmin(losses))])


def _left_out_loss(
    teff_k: FloatArray, values: FloatArray, errors: FloatArray, left_out: NDArray[np.bool_], smoothness: float
) -> float:
    """Return the loss of left-out points, linear beyond two errors so that no odd one decides."""
    loss = 0.0
    for band in range(values.shape[1]):
        known = np.isfinite(values[:, band])
        used, tested = known & ~left_out, known & left_out
        coefficients = fit_curve(teff_k[used], values[used, band], errors[used, band], smoothness)
        miss = np.abs(basis(teff_k[tested]) @ coefficients - values[tested, band]) / errors[tested, band]
        loss += float(np.sum(np.where(miss < 2.0, 0.5 * miss**2, 2.0 * miss - 2.0)))
    return loss


def fit_curve(teff_k: ArrayLike, values: ArrayLike, errors: ArrayLike, smoothness: float) -> FloatArray:
    """Return B-spline coefficients of a smooth curve through points, deaf to odd ones (Tukey's biweight).

    Parameters
    ----------
    teff_k, values, errors : array_like
        (n_points,): temperatures [K], values and their errors.
    smoothness : float
        Weight of the squared second differences of the coefficients.
    """
    from scipy.linalg import solveh_banded

    values, errors = np.asarray(values, dtype=np.float64), np.asarray(errors, dtype=np.float64)
    first, splines = _local_basis(teff_k)
    n_coefficients = len(LN_TEFF_NODES) + 2
    penalty = smoothness / np.mean(errors) ** 2 * 1e-2 * _bend_penalty(n_coefficients)
    penalty[0] += _RIDGE
    trust = np.ones(len(values))
    coefficients = np.zeros(n_coefficients)
    for _ in range(_ROBUST_STEPS):
        weight = trust / errors**2
        normal, right = penalty.copy(), np.zeros(n_coefficients)
        for a in range(4):
            right += np.bincount(first + a, weight * values * splines[:, a], n_coefficients)
            for b in range(a, 4):
                normal[b - a] += np.bincount(first + a, weight * splines[:, a] * splines[:, b], n_coefficients)
        found = solveh_banded(normal, right, lower=True)
        settled = np.max(np.abs(found - coefficients)) < _SETTLED
        coefficients = found
        if settled:
            break
        curve = np.sum(splines * coefficients[first[:, np.newaxis] + np.arange(4)], axis=1)
        miss = (values - curve) / errors
        scale = max(_MAD_TO_SIGMA * float(np.median(np.abs(miss))), 1.0)  # what its error allows is not odd
        trust = np.clip(1.0 - (miss / (_BIWEIGHT * scale)) ** 2, 0.0, None) ** 2
    return coefficients


def _bend_penalty(n: int) -> FloatArray:
    """Return the matrix of squared second differences of n coefficients, its lower diagonals, (4, n)."""
    bend = np.diff(np.eye(n), n=2, axis=0)
    square = bend.T @ bend
    diagonals = np.zeros((4, n))
    for offset in range(3):
        diagonals[offset, : n - offset] = np.diagonal(square, -offset)
    return diagonals


def basis(teff_k: ArrayLike) -> FloatArray:
    """Return the cubic B-splines on the nodes of the departures at temperatures [K], (n, n_nodes + 2)."""
    first, splines = _local_basis(teff_k)
    design = np.zeros((len(first), len(LN_TEFF_NODES) + 2))
    design[np.arange(len(first))[:, np.newaxis], first[:, np.newaxis] + np.arange(4)] = splines
    return design


def _local_basis(teff_k: ArrayLike) -> tuple[NDArray[np.int64], FloatArray]:
    """Return the first of the four splines that are not zero at each temperature, and their values (n, 4)."""
    position = (np.log(np.atleast_1d(np.asarray(teff_k, dtype=np.float64))) - LN_TEFF_NODES[0]) / LN_TEFF_STEP
    first = np.clip(np.floor(position), 0, len(LN_TEFF_NODES) - 2).astype(np.int64)
    t = position - first
    splines = np.stack(
        [(1.0 - t) ** 3, 3.0 * t**3 - 6.0 * t**2 + 4.0, -3.0 * t**3 + 3.0 * t**2 + 3.0 * t + 1.0, t**3], axis=1
    )
    return first, splines / 6.0


def at_nodes(coefficients: FloatArray) -> FloatArray:
    """Return a curve's values at the nodes of the departures."""
    return (coefficients[:-2] + 4.0 * coefficients[1:-1] + coefficients[2:]) / 6.0

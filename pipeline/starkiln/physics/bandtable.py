"""Blackbody band fluxes through dust, from a table that is cubic in ln T and in A_V."""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starkiln.physics.extinction import extinction_ratio, law_range_um
from starkiln.physics.passbands import Passband
from starkiln.physics.planck import ln_exitance_jy

FloatArray = NDArray[np.float64]

LN_TEFF_STEP = math.log(60_000.0 / 1_500.0) / 256.0
AV_STEP = 0.25  # twice this is too coarse for the red leaks of the u bands
_PAD_STEPS = 3  # beyond both ends of the temperatures, where a spline with free ends is at its worst
_MIN_AV_NODES = 4


class ExtinctionRangeWarning(UserWarning):
    """A passband reaches beyond the wavelengths that the extinction law was published for."""


@dataclass(frozen=True, eq=False)
class BandTable:
    """Coefficients of uniform cubic B-splines of ``g(ln T, A_V) = ln(<pi B_nu(T) 10^(-0.4 A_V k)>_b / Jy)``.

    A star's flux density in band b is ``omega * exp(g)`` in Jy, with ``omega = (R/d)²``. ``coef`` is
    C-contiguous of shape (n_bands, n_teff + 2, n_av + 2). Along one axis the value at node i is
    ``(c[i] + 4 c[i+1] + c[i+2]) / 6``. Nodes are at ``ln_teff_min + i * ln_teff_step`` and at
    ``j * av_step``.
    """

    coef: FloatArray
    ln_teff_min: float
    ln_teff_step: float
    n_teff: int
    av_step: float
    n_av: int

    @property
    def teff_nodes_k(self) -> FloatArray:
        """The temperatures [K] of the nodes."""
        return np.exp(self.ln_teff_min + self.ln_teff_step * np.arange(self.n_teff))


def build_band_table(
    passbands: Sequence[Passband], teff_min_k: float, teff_max_k: float, av_max: float, law: str, rv: float
) -> BandTable:
    """Return the table of blackbody band fluxes for temperatures and extinctions in the given ranges.

    Parameters
    ----------
    passbands : sequence of Passband
        The bands, in the order of the table's first axis.
    teff_min_k, teff_max_k : float
        Range of temperatures [K]; the table reaches three steps further at both ends.
    av_max : float
        The table goes from A_V = 0 to at least this [mag].
    law, rv : str, float
        The extinction law and R_V, see :func:`~starkiln.physics.extinction.extinction_ratio`.

    Warns
    -----
    ExtinctionRangeWarning
        If more than 1 per cent of a band's response lies outside the wavelengths of the law.
    """
    _warn_outside(passbands, law)
    ln_teff_min = math.log(teff_min_k) - _PAD_STEPS * LN_TEFF_STEP
    n_teff = _nodes(math.log(teff_max_k / teff_min_k), LN_TEFF_STEP) + 2 * _PAD_STEPS
    n_av = max(_nodes(av_max, AV_STEP), _MIN_AV_NODES)
    teff_k = np.exp(ln_teff_min + LN_TEFF_STEP * np.arange(n_teff, dtype=np.float64))
    av_mag = AV_STEP * np.arange(n_av, dtype=np.float64)
    coef = np.empty((len(passbands), n_teff + 2, n_av + 2))
    for band, passband in enumerate(passbands):
        ratio = extinction_ratio(law, rv, passband.quadrature[0])
        in_teff = spline_coefficients(ln_band_flux(passband, ratio, teff_k, av_mag))
        coef[band] = spline_coefficients(in_teff.T).T
    return BandTable(coef, ln_teff_min, LN_TEFF_STEP, n_teff, AV_STEP, n_av)


def ln_band_flux(passband: Passband, ratio: FloatArray, teff_k: FloatArray, av_mag: FloatArray) -> FloatArray:
    """Return ln(<pi B_nu(T) 10^(-0.4 A_V k)>_b / Jy) by direct summation, of shape (n_teff, n_av).

    ``ratio`` is k = A(lambda)/A_V at the nodes of the passband's quadrature.
    """
    nodes_um, weights = passband.quadrature
    ln_terms = ln_exitance_jy(nodes_um, teff_k[:, np.newaxis]) + np.log(weights)
    ln_largest = ln_terms.max(axis=1)
    terms = np.exp(ln_terms - ln_largest[:, np.newaxis])
    ln_flux = np.empty((len(teff_k), len(av_mag)))
    # A plain sum per A_V, not a matrix product: that one's bits depend on the number of threads.
    for column, av in enumerate(av_mag):
        transmission = np.exp(-0.4 * math.log(10.0) * av * ratio)
        ln_flux[:, column] = ln_largest + np.log(np.sum(terms * transmission, axis=1))
    return ln_flux


def ln_flux(table: BandTable, teff_k: ArrayLike, av_mag: ArrayLike) -> FloatArray:
    """Return ln(<pi B_nu(T) 10^(-0.4 A_V k)>_b / Jy) from the table, of shape (n, n_bands).

    Raises
    ------
    ValueError
        If a temperature [K] or an extinction [mag] lies outside the table.
    """
    teff_k, av_mag = np.broadcast_arrays(np.atleast_1d(teff_k), np.atleast_1d(av_mag))
    row, row_weights = _basis((np.log(teff_k) - table.ln_teff_min) / table.ln_teff_step, table.n_teff)
    column, column_weights = _basis(av_mag / table.av_step, table.n_av)
    result = np.zeros((len(teff_k), len(table.coef)))
    for i in range(4):
        for j in range(4):
            weight = row_weights[i] * column_weights[j]
            result += weight[:, np.newaxis] * table.coef[:, row + i, column + j].T
    return result


def _basis(position: FloatArray, n_nodes: int) -> tuple[NDArray[np.int64], tuple[FloatArray, ...]]:
    """Return the first coefficient and the four cubic B-spline weights at positions in units of the step."""
    slack = 1e-9
    if np.any((position < -slack) | (position > n_nodes - 1 + slack) | np.isnan(position)):
        raise ValueError("temperature or extinction outside the table")
    first = np.clip(np.floor(position), 0, n_nodes - 2).astype(np.int64)
    t = position - first
    return first, (
        (1.0 - t) ** 3 / 6.0,
        (3.0 * t**3 - 6.0 * t**2 + 4.0) / 6.0,
        (-3.0 * t**3 + 3.0 * t**2 + 3.0 * t + 1.0) / 6.0,
        t**3 / 6.0,
    )


def _nodes(length: float, step: float) -> int:
    """Return how many nodes a step apart cover a length, the first one included."""
    return math.ceil(length / step - 1e-9) + 1


def spline_coefficients(values: FloatArray) -> FloatArray:
    """Return the B-spline coefficients, n + 2 rows, of a cubic through n rows of values (not-a-knot ends)."""
    from scipy.linalg import solve_banded

    n = len(values)
    # Rows of the matrix: third derivative continuous at the second node, interpolation, the same at the last.
    matrix = np.zeros((9, n + 2))  # nine diagonals, matrix[4 + row - column, column]
    columns = np.arange(n)
    matrix[5, columns], matrix[4, columns + 1], matrix[3, columns + 2] = 1.0 / 6.0, 4.0 / 6.0, 1.0 / 6.0
    for column, weight in enumerate((1.0, -4.0, 6.0, -4.0, 1.0)):
        matrix[4 - column, column] = weight
        matrix[8 - column, n - 3 + column] = weight
    right = np.zeros((n + 2, values.shape[1]))
    right[1:-1] = values
    return np.asarray(solve_banded((4, 4), matrix, right))


def _warn_outside(passbands: Sequence[Passband], law: str) -> None:
    low_um, high_um = law_range_um(law)
    outside = []
    for passband in passbands:
        nodes_um, weights = passband.quadrature
        if weights[(nodes_um < low_um) | (nodes_um > high_um)].sum() > 0.01:
            outside.append(passband.name)
    if outside:
        warnings.warn(
            f"extinction law {law} was published for {low_um:.3g} to {high_um:.3g} um; in "
            f"{', '.join(outside)} it goes on with the shape of G23, which covers every built-in band",
            ExtinctionRangeWarning,
            stacklevel=3,
        )

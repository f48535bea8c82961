"""From the departures of some bands to those of others: a smooth departure per wavelength that gives all of them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from starkiln.physics.passbands import Passband
from starkiln.physics.planck import ln_exitance_jy

FloatArray = NDArray[np.float64]

_NODES_PER_UNIT = 60  # of ln wavelength
_ITERATIONS = 6
_BAND_ERROR = 0.01  # to which the known bands are met
_RIDGE = 1e-6  # towards the mean of the known bands: one or two alone leave slopes free
_BEND = 0.01  # second difference, from node to node, that counts as one error


def transfer(known: Sequence[Passband], ln_d: FloatArray, wanted: Sequence[Passband], teff_k: FloatArray) -> FloatArray:
    """Return ln D of the wanted bands, (n_wanted, n), from those of the known bands at the same temperatures.

    At each temperature D(λ) is as little bent in ln λ as lets it give the band averages of the known bands to about 1
    per cent; it holds for bands whose light comes from where known bands are. NaN where no band is known.

    Parameters
    ----------
    known, wanted : sequence of Passband
        The bands.
    ln_d : ndarray
        (n_known, n): NaN where a known band has no departure at that temperature.
    teff_k : ndarray
        (n,) temperatures [K].
    """
    nodes = _nodes([*known, *wanted])
    light_known = np.stack([_light(band, nodes, teff_k) for band in known])
    light_wanted = np.stack([_light(band, nodes, teff_k) for band in wanted])
    result = np.full((len(wanted), len(teff_k)), np.nan)
    for place in range(len(teff_k)):
        used = np.isfinite(ln_d[:, place])
        if np.any(used):
            spectrum = _fit(light_known[used, place], ln_d[used, place])
            result[:, place] = np.log(light_wanted[:, place] @ np.exp(spectrum))
    return result


def _nodes(passbands: Sequence[Passband]) -> FloatArray:
    low = min(float(band.wavelength_um[0]) for band in passbands)
    high = max(float(band.wavelength_um[-1]) for band in passbands)
    return np.linspace(np.log(low), np.log(high), int(np.ceil(np.log(high / low) * _NODES_PER_UNIT)) + 1)


def _light(passband: Passband, nodes: FloatArray, teff_k: FloatArray) -> FloatArray:
    """Return the share of a blackbody's band flux that comes from around each node, (n, n_nodes)."""
    wavelength_um, weights = passband.quadrature
    position = (np.log(wavelength_um) - nodes[0]) / (nodes[1] - nodes[0])
    left = np.clip(np.floor(position), 0, len(nodes) - 2).astype(np.int64)
    right_share = position - left
    light = np.empty((len(teff_k), len(nodes)))
    for row, teff in enumerate(teff_k):
        ln_terms = ln_exitance_jy(wavelength_um, teff) + np.log(weights)
        terms = np.exp(ln_terms - ln_terms.max())
        terms /= terms.sum()
        light[row] = np.bincount(left, terms * (1.0 - right_share), len(nodes))
        light[row] += np.bincount(left + 1, terms * right_share, len(nodes))
    return light


def _fit(light: FloatArray, ln_d: FloatArray) -> FloatArray:
    """Return ln D at the nodes: Gauss-Newton steps for the band averages against the bends."""
    n_nodes = light.shape[1]
    bend = np.diff(np.eye(n_nodes), n=2, axis=0) / _BEND
    normal_of_bend = bend.T @ bend + _RIDGE * np.eye(n_nodes)
    mean = float(ln_d.mean())
    spectrum = np.full(n_nodes, mean)
    for _ in range(_ITERATIONS):
        parts = light * np.exp(spectrum)
        totals = parts.sum(axis=1)
        slopes = parts / totals[:, np.newaxis] / _BAND_ERROR
        target = slopes.T @ ((ln_d - np.log(totals)) / _BAND_ERROR + slopes @ spectrum) + _RIDGE * mean
        spectrum = np.linalg.solve(slopes.T @ slopes + normal_of_bend, target)
    return spectrum

"""Departures of reference stars: what their observed fluxes are over those of a blackbody of their T and R/d."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from starkiln.physics.bandtable import ln_band_flux
from starkiln.physics.constants import PARSEC_M, RSUN_M
from starkiln.physics.departures import LN_TEFF_NODES, LN_TEFF_STEP
from starkiln.physics.passbands import Passband

FloatArray = NDArray[np.float64]

_SLOPE_NODES = 2  # to either side: departures are known, and smooth, over some per cent in T


def departure_points(
    passbands: Sequence[Passband], teff_k: FloatArray, ln_omega: FloatArray, ln_flux_jy: FloatArray
) -> FloatArray:
    """Return ln D of each star in each band, ``ln f - ln Ω - g(T, 0)``, of shape (n_stars, n_bands).

    Parameters
    ----------
    passbands : sequence of Passband
        The bands.
    teff_k, ln_omega : ndarray
        (n_stars,): effective temperature [K] and ln (R/d)².
    ln_flux_jy : ndarray
        (n_stars, n_bands): ln of the flux density / Jy, free of dust; NaN where missing.
    """
    return ln_flux_jy - ln_omega[:, np.newaxis] - blackbody_ln_flux(passbands, teff_k)


def blackbody_ln_flux(passbands: Sequence[Passband], teff_k: FloatArray) -> FloatArray:
    """Return ln(<pi B_nu(T)>_b / Jy) without dust, of shape (n, n_bands)."""
    no_dust = np.zeros(1)
    return np.stack(
        [ln_band_flux(band, np.zeros_like(band.quadrature[0]), teff_k, no_dust)[:, 0] for band in passbands], axis=1
    )


def ln_omega(radius_rsun: FloatArray, distance_pc: float | FloatArray) -> FloatArray:
    """Return ln (R/d)²."""
    return 2.0 * np.log(radius_rsun * RSUN_M / (np.asarray(distance_pc) * PARSEC_M))


def ln_flux_jy(passbands: Sequence[Passband], magnitude: FloatArray) -> FloatArray:
    """Return ln(f / Jy) of magnitudes (n, n_bands) in each passband's own system.

    Raises
    ------
    ValueError
        If a passband has no zero point.
    """
    zero_points_jy = [passband.zero_point_jy for passband in passbands]
    if None in zero_points_jy:
        raise ValueError("a passband without a zero point has no magnitudes")
    return np.log(np.array(zero_points_jy, dtype=np.float64)) - 0.4 * np.log(10.0) * magnitude


def temperature_slope(passbands: Sequence[Passband], ln_d: FloatArray) -> FloatArray:
    """Return d ln f / d ln T at constant luminosity at the nodes, (n_bands, n_nodes), of bands with departures ln_d.

    At constant luminosity Ω goes as T⁻⁴. This is the pattern that the bands of a star show whose published
    temperature is off the scale.
    """
    ln_flux = blackbody_ln_flux(passbands, np.exp(LN_TEFF_NODES)).T + ln_d
    padded = np.pad(ln_flux, ((0, 0), (_SLOPE_NODES, _SLOPE_NODES)), mode="edge")
    rise = padded[:, 2 * _SLOPE_NODES :] - padded[:, : -2 * _SLOPE_NODES]
    nodes = np.pad(np.arange(len(LN_TEFF_NODES)), _SLOPE_NODES, mode="edge")
    return rise / (LN_TEFF_STEP * (nodes[2 * _SLOPE_NODES :] - nodes[: -2 * _SLOPE_NODES])) - 4.0

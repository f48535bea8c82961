"""Colours: what the eye sees of a blackbody, and a palette that colour-blind readers tell apart."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starkiln.physics.planck import ln_exitance_jy

# Okabe & Ito (2008), Color Universal Design, https://jfly.uni-koeln.de/color/ (from memory).
BLUE, GREEN, VERMILION = "#0072B2", "#009E73", "#D55E00"

# Wyman, Sloan & Shirley 2013, Journal of Computer Graphics Techniques 2(2), 1: the CIE 1931 colour matching functions
# as sums of lobes: height, centre [nm], width below and above it [nm] (from memory; see the tests).
_LOBES = {
    "x": ((1.056, 599.8, 37.9, 31.0), (0.362, 442.0, 16.0, 26.7), (-0.065, 501.1, 20.4, 26.2)),
    "y": ((0.821, 568.8, 46.9, 40.5), (0.286, 530.9, 16.3, 31.1)),
    "z": ((1.217, 437.0, 11.8, 36.0), (0.681, 459.0, 26.0, 13.8)),
}
_WAVELENGTH_NM = np.arange(360.0, 831.0, 5.0)

# IEC 61966-2-1 (sRGB), from XYZ to linear red, green and blue.
_TO_RGB = np.array([[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.2040, 1.0570]])


def _matching(name: str) -> NDArray[np.float64]:
    total = np.zeros(len(_WAVELENGTH_NM))
    for height, centre, below, above in _LOBES[name]:
        width = np.where(centre > _WAVELENGTH_NM, below, above)
        total += height * np.exp(-0.5 * ((_WAVELENGTH_NM - centre) / width) ** 2)
    return total


def blackbody_xyz(teff_k: ArrayLike) -> NDArray[np.float64]:
    """Return the CIE 1931 tristimulus values (n, 3) of blackbodies, of sum 1: x, y and z of the chromaticity."""
    teff_k = np.atleast_1d(np.asarray(teff_k, dtype=np.float64))[:, np.newaxis]
    ln_per_nm = ln_exitance_jy(_WAVELENGTH_NM * 1e-3, teff_k) - 2.0 * np.log(_WAVELENGTH_NM)
    spectrum = np.exp(ln_per_nm - ln_per_nm.max(axis=1, keepdims=True))
    xyz = np.stack([(spectrum * _matching(name)).sum(axis=1) for name in "xyz"], axis=1)
    return np.asarray(xyz / xyz.sum(axis=1, keepdims=True))


def blackbody_rgb(teff_k: ArrayLike) -> NDArray[np.float64]:
    """Return the sRGB colours (n, 3), 0 to 1, of blackbodies [K] as bright as the screen can show them."""
    linear = np.maximum(blackbody_xyz(teff_k) @ _TO_RGB.T, 0.0)
    linear /= linear.max(axis=1, keepdims=True)
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1.0 / 2.4) - 0.055)


def blackbody_hex(teff_k: float) -> str:
    """Return the colour of a blackbody as #rrggbb."""
    red, green, blue = (round(255 * float(part)) for part in blackbody_rgb(teff_k)[0])
    return f"#{red:02x}{green:02x}{blue:02x}"

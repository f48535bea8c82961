"""Published relations between the magnitudes that stars have in different systems.

Each takes and returns magnitudes (n,) by band, in the systems of their catalogues, and NaN outside the colours that
the relation was published for.
"""

from __future__ import annotations

import numpy as np
from numpy.polynomial.polynomial import polyval
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Magnitudes = dict[str, FloatArray]

JESTER = "Jester et al. 2005, AJ 130, 873, table 1"
TONRY = "Tonry et al. 2012, ApJ 750, 99, table 6"
FINKBEINER = "Finkbeiner et al. 2016, ApJ 822, 66, table 2 (z and y from memory)"
DES = "Dark Energy Survey DR2: Abbott et al. 2021, ApJS 255, 20, appendix"
FINDEISEN = "Findeisen & Hillenbrand 2010, AJ 139, 1338: locus of photospheres (from memory)"
GAIA_DR3 = "Gaia DR3 documentation, section 5.5.1 (Riello et al. 2021, A&A 649, A3, appendix C)"
RUBIN = "Rubin Observatory technical note RTN-099, DES to LSST, version of 2025-08-22"

_JESTER_RI_MAX = 1.15
# SDSS colours from UBVRcIc: intercept and slope; stars with U-B < 0, and all stars.
_JESTER_HOT = {
    "u-g": (1.14, 1.28),
    "g-V": (-0.13, 0.64),
    "r-V": (0.11, -0.46),
    "r-i": (-0.22, 0.98),
    "r-z": (-0.42, 1.69),
}
_JESTER_ALL = {
    "u-g": (1.13, 1.28),
    "g-V": (-0.12, 0.60),
    "r-V": (0.11, -0.42),
    "r-i": (-0.20, 0.91),
    "r-z": (-0.41, 1.72),
}

# Polynomials in (g-r) of Pan-STARRS.
_TONRY_FROM_PS1 = {
    "B-g": (0.212, 0.556, 0.034),
    "V-r": (0.005, 0.462, 0.013),
    "I-i": (-0.366, -0.136, -0.018),
}
_TONRY_TO_SDSS = {
    "g": ("g", (0.013, 0.145, 0.019)),
    "r": ("r", (-0.001, 0.004, 0.007)),
    "i": ("i", (-0.005, 0.011, 0.010)),
    "z": ("z", (0.013, -0.039, -0.012)),
    "y": ("z", (-0.031, 0.111, 0.004)),  # z of SDSS less y
}

# Pan-STARRS less SDSS (y: less z of SDSS), polynomials in (g-i) of Pan-STARRS.
_FINKBEINER_GI = (0.4, 2.7)
_FINKBEINER = {
    "g": ("g", (-0.01808, -0.13595, 0.01941, -0.00183)),
    "r": ("r", (-0.01836, -0.03577, 0.02612, -0.00558)),
    "i": ("i", (0.01170, -0.00400, 0.00066, -0.00058)),
    "z": ("z", (-0.01062, 0.07529, -0.03592, 0.00890)),
    "y": ("z", (0.08924, -0.20878, 0.10360, -0.02441)),
}

# DES less SDSS: intercept and slope in a colour of SDSS.
_DES = {
    "g": ("g-i", (0.008, -0.061)),
    "r": ("r-i", (-0.007, -0.155)),
    "i": ("r-i", (0.032, -0.166)),
    "z": ("r-i", (0.027, -0.056)),
}
_DES_COLOURS = {"g-i": (-1.0, 3.5), "r-i": (-0.4, 2.0)}

# LSST less DES, polynomials in a colour of DES.
_RUBIN = {
    "g": ("g-i", (-1.0, 3.9), (0.006, 0.016, -0.003)),
    "r": ("r-i", (-0.4, 2.3), (0.010, 0.185, -0.015)),
    "i": ("r-i", (-0.4, 2.2), (-0.009, 0.150, -0.003)),
    "z": ("i-z", (-0.3, 1.84), (-0.003, 0.270, 0.036)),
}

# Gaia less V, polynomials in V - Ic. Published up to 4 or 5 mag, but the reddest stars there are giants.
_GAIA_VI = (-0.4, 2.5)
_GAIA_DR3 = {
    "g": (-0.01597, -0.02809, -0.2483, 0.03656, -0.002939),
    "bp": (-0.0143, 0.3564, -0.1332, 0.01212),
    "rp": (0.01868, -0.9028, -0.005321, -0.004186),
}


def sdss_from_johnson(u: FloatArray, b: FloatArray, v: FloatArray, r: FloatArray, i: FloatArray) -> Magnitudes:
    """Return u g r i z of SDSS from Johnson-Cousins U B V Rc Ic: Jester et al. 2005, table 1, stars."""
    hot = u - b < 0.0
    colour = {"u-g": u - b, "g-V": b - v, "r-V": b - v, "r-i": r - i, "r-z": r - i}
    value = {
        name: np.where(hot, polyval(colour[name], _JESTER_HOT[name]), polyval(colour[name], _JESTER_ALL[name]))
        for name in colour
    }
    inside = r - i < _JESTER_RI_MAX
    g_sdss, r_sdss = v + value["g-V"], v + value["r-V"]
    return {
        "u": g_sdss + value["u-g"],
        "g": g_sdss,
        "r": r_sdss,
        "i": np.where(inside, r_sdss - value["r-i"], np.nan),
        "z": np.where(inside, r_sdss - value["r-z"], np.nan),
    }


def panstarrs_from_johnson(b: FloatArray, v: FloatArray, i: FloatArray) -> Magnitudes:
    """Return g r i of Pan-STARRS from B V Ic: Tonry et al. 2012, table 6, solved for (g-r)."""
    constant, slope, bend = np.subtract(_TONRY_FROM_PS1["B-g"], _TONRY_FROM_PS1["V-r"])
    slope += 1.0  # B - V = (B-g) + (g-r) - (V-r)
    g_r = (-slope + np.sqrt(slope**2 - 4.0 * bend * (constant - (b - v)))) / (2.0 * bend)
    r_ps1 = v - polyval(g_r, _TONRY_FROM_PS1["V-r"])
    return {"g": r_ps1 + g_r, "r": r_ps1, "i": i - polyval(g_r, _TONRY_FROM_PS1["I-i"])}


def sdss_from_panstarrs(panstarrs: Magnitudes) -> Magnitudes:
    """Return SDSS magnitudes of the given Pan-STARRS bands: Tonry et al. 2012, table 6."""
    g_r = panstarrs["g"] - panstarrs["r"]
    return {band: panstarrs[band] + polyval(g_r, _TONRY_TO_SDSS[band][1]) for band in panstarrs if band != "y"}


def panstarrs_from_sdss(sdss: Magnitudes) -> Magnitudes:
    """Return g r i z y of Pan-STARRS from SDSS: Finkbeiner et al. 2016, or Tonry et al. 2012 for bluer stars."""
    g_i = _solve(sdss["g"] - sdss["i"], np.subtract(_FINKBEINER["g"][1], _FINKBEINER["i"][1]))
    g_r = _solve(sdss["g"] - sdss["r"], np.subtract(_TONRY_TO_SDSS["r"][1], _TONRY_TO_SDSS["g"][1]))
    low, high = _FINKBEINER_GI
    result = {}
    for band, (anchor, coefficients) in _FINKBEINER.items():
        red = sdss[anchor] + polyval(g_i, coefficients)
        blue = sdss[anchor] - polyval(g_r, _TONRY_TO_SDSS[band][1])
        result[band] = np.where(g_i > high, np.nan, np.where(g_i < low, blue, red))
    return result


def des_from_sdss(sdss: Magnitudes) -> Magnitudes:
    """Return g r i z of the Dark Energy Survey from SDSS: DES DR2."""
    result = {}
    for band, (name, coefficients) in _DES.items():
        colour = _colour(sdss, name)
        result[band] = sdss[band] + _within(colour, _DES_COLOURS[name], np.asarray(polyval(colour, coefficients)))
    return result


def rubin_from_des(des: Magnitudes) -> Magnitudes:
    """Return g r i z of Rubin from DES: RTN-099, synthetic magnitudes of the spectra of Pickles 1998."""
    result = {}
    for band, (name, colours, coefficients) in _RUBIN.items():
        colour = _colour(des, name)
        result[band] = des[band] + _within(colour, colours, np.asarray(polyval(colour, coefficients)))
    return result


def gaia_dr3_from_johnson(v: FloatArray, i: FloatArray) -> Magnitudes:
    """Return G, BP and RP of Gaia DR3 from V and Ic: Gaia DR3 documentation, section 5.5.1."""
    colour = v - i
    return {
        band: v + _within(colour, _GAIA_VI, np.asarray(polyval(colour, values))) for band, values in _GAIA_DR3.items()
    }


def nuv_from_2mass(j: FloatArray, ks: FloatArray) -> FloatArray:
    """Return GALEX NUV (AB) of inactive F to K dwarfs from J and Ks: Findeisen & Hillenbrand 2010."""
    return j + 10.36 * (j - ks) + 2.76


def _colour(magnitude: Magnitudes, name: str) -> FloatArray:
    first, second = name.split("-")
    return magnitude[first] - magnitude[second]


def _within(colour: FloatArray, bounds: tuple[float, float], value: FloatArray) -> FloatArray:
    return np.where((colour >= bounds[0]) & (colour <= bounds[1]), value, np.nan)


def _solve(other: FloatArray, coefficients: FloatArray) -> FloatArray:
    """Return the colour x for which x = other + polynomial(x), by iteration: the polynomials are small."""
    colour = other.copy()
    for _ in range(30):
        colour = other + polyval(colour, coefficients)
    return colour

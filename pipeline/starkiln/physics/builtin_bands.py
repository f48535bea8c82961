"""The built-in passbands: where the curve is, what the detector counts, and the flux of magnitude zero.

Every zero-point flux is the band average (see :mod:`starkiln.physics.passbands`) of a source of
magnitude zero in the system that the band's catalogues use.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from starkiln.physics.constants import AB_ZERO_JY

Detector = Literal["photon", "energy"]
System = Literal["AB", "Vega"]


@dataclass(frozen=True)
class BuiltinBand:
    """One built-in passband.

    ``curve`` names a filter of the ``speclite`` package; ``zero_point_error`` is a fraction of the flux;
    ``vega_spectrum`` and ``vega_mag`` say which CALSPEC spectrum of Vega, taken at which magnitude, the
    zero point agrees with, for bands of the Vega system. ``zeros_um`` are wavelengths of no response that
    the file leaves out.
    """

    name: str
    curve: str
    detector: Detector
    system: System
    zero_point_jy: float
    zero_point_error: float
    source: str
    vega_spectrum: str = ""
    vega_mag: float | None = None
    zeros_um: tuple[float, ...] = ()


def _ab(name: str, curve: str, error: float, source: str, zeros_um: tuple[float, ...] = ()) -> BuiltinBand:
    return BuiltinBand(name, curve, "photon", "AB", AB_ZERO_JY, error, source, zeros_um=zeros_um)


def _from_ab_offset(ab_minus_vega_mag: float) -> float:
    return AB_ZERO_JY * 10.0 ** (-0.4 * ab_minus_vega_mag)


_GALEX = "AB; error: Morrissey et al. 2007, ApJS 173, 682 (0.05 mag FUV, 0.03 mag NUV)"
_SDSS = (
    "AB; catalogue magnitudes are close to it: u_AB = u - 0.04, z_AB = z + 0.02 (SDSS data release notes, "
    "flux calibration); the error covers the offset"
)
# sdss2010-u jumps from its blue wing to its red leak with nothing between; a straight line across would be
# a leak of 0.3 per cent, 4 per cent of the light of a 3000 K blackbody. Its sister curve without atmosphere,
# sdss2010noatm-u, has the two zeros.
_SDSS_U_ZEROS_UM = (0.418, 0.760)
_PANSTARRS = "AB; error: Tonry et al. 2012, ApJ 750, 99 (0.02 mag)"
_DECAM = "AB; error of 0.01 mag: common practice, no source"
_RUBIN = "AB; error of 0.01 mag: the survey's requirement (LSST Science Requirements Document, from memory)"
_EUCLID = "AB; error of 0.02 mag: common practice, no source"

# Gaia: the flux of magnitude zero follows from the AB zero point of the curve less the Vega zero point
# that made the catalogue's magnitudes. The DR3 pair is of Riello et al. 2021. The DR2 curve is the revised
# one, whose AB zero point is paired here with the Vega zero point of the released DR2 magnitudes.
_GAIA_DR3 = "Riello et al. 2021, A&A 649, A3: AB and Vega zero points of EDR3"
_GAIA_DR2 = (
    "Evans et al. 2018, A&A 616, A4: AB zero point of the revised passband, Vega zero point of the released "
    "magnitudes (Gaia DR2 passband tables)"
)
# Vega is alpha_lyr_mod_002 scaled so that V = 0.023 mag (Riello et al. 2021, section 5.4 of the Gaia EDR3
# documentation).
_GAIA_DR3_VEGA = ("alpha_lyr_mod_002", 0.023)
# DR2 took a 9550 K model of Vega, the shape of alpha_lyr_mod_003, with 3.66e-11 W m-2 nm-1 at 550 nm for
# zero magnitude (from memory; the three bands together confirm shape and level): 2.5 log10(3.66 / 3.548).
_GAIA_DR2_VEGA = ("alpha_lyr_mod_003", 0.034)

# Johnson-Cousins: the curves printed by Bessell 1990 are energy responses (dividing them by the wavelength
# gives the photon responses of Bessell & Murphy 2012), and Vega has 0.03 mag in every band.
_JOHNSON = (
    "Willmer 2018, ApJS 236, 47, table 3: AB minus Vega of the Bessell & Murphy 2012 bands (Vega 0.03 mag); "
    "error: the 2 per cent of its Vega spectrum, twice that in U for the curve"
)
_TWOMASS = "Cohen, Wheaton & Megeath 2003, AJ 126, 1090"
_WISE = "Jarrett et al. 2011, ApJ 735, 112"
_WISE_W4 = (
    _WISE + "; the filter's true response lies about 3 per cent further red than the curve "
    "(Brown, Jarrett & Cluver 2014, PASA 31, e049)"
)
_VEGA_2014 = ("alpha_lyr_mod_002", 0.0)
_VEGA_JOHNSON = ("alpha_lyr_mod_002", 0.03)

BUILTIN_BANDS: tuple[BuiltinBand, ...] = (
    _ab("galex_fuv", "galex-fuv", 0.05, _GALEX),
    _ab("galex_nuv", "galex-nuv", 0.03, _GALEX),
    _ab("sdss_u", "sdss2010-u", 0.04, _SDSS, _SDSS_U_ZEROS_UM),
    _ab("sdss_g", "sdss2010-g", 0.01, _SDSS),
    _ab("sdss_r", "sdss2010-r", 0.01, _SDSS),
    _ab("sdss_i", "sdss2010-i", 0.01, _SDSS),
    _ab("sdss_z", "sdss2010-z", 0.02, _SDSS),
    *(_ab(f"panstarrs_{band}", f"panstarrs-{band}", 0.02, _PANSTARRS) for band in "grizy"),
    *(
        BuiltinBand(
            f"gaia_dr3_{band.lower()}",
            f"gaiadr3-{band}",
            "photon",
            "Vega",
            _from_ab_offset(ab_mag - vega_mag),
            error,
            _GAIA_DR3,
            *_GAIA_DR3_VEGA,
        )
        for band, ab_mag, vega_mag, error in (
            ("G", 25.8010446445, 25.6873668671, 0.0028),
            ("BP", 25.3539555559, 25.3385422158, 0.0028),
            ("RP", 25.1039837393, 24.7478955012, 0.0038),
        )
    ),
    *(
        BuiltinBand(
            f"gaia_dr2_{band.lower()}",
            f"gaiadr2-{band}",
            "photon",
            "Vega",
            _from_ab_offset(ab_mag - vega_mag),
            error,
            _GAIA_DR2,
            *_GAIA_DR2_VEGA,
        )
        for band, ab_mag, vega_mag, error in (
            ("G", 25.7915509947, 25.6883657251, 0.0018),
            ("BP", 25.3861560855, 25.3513881707, 0.0014),
            ("RP", 25.1161664528, 24.7619199882, 0.0035),
        )
    ),
    *(
        BuiltinBand(
            name,
            f"bessell-{band}",
            "energy",
            "Vega",
            _from_ab_offset(ab_minus_vega_mag),
            error,
            _JOHNSON,
            *_VEGA_JOHNSON,
        )
        for name, band, ab_minus_vega_mag, error in (
            ("johnson_u", "U", 0.768, 0.04),
            ("johnson_b", "B", -0.134, 0.02),
            ("johnson_v", "V", -0.017, 0.02),
            ("cousins_r", "R", 0.168, 0.02),
            ("cousins_i", "I", 0.408, 0.02),
        )
    ),
    *(
        BuiltinBand(
            f"2mass_{band.lower()}",
            f"twomass-{band}",
            "photon",
            "Vega",
            zero_jy,
            error_jy / zero_jy,
            _TWOMASS,
            *_VEGA_2014,
        )
        for band, zero_jy, error_jy in (("J", 1594.0, 27.8), ("H", 1024.0, 20.0), ("Ks", 666.7, 12.6))
    ),
    *(
        BuiltinBand(
            f"wise_{band.lower()}",
            f"wise2010-{band}",
            "photon",
            "Vega",
            zero_jy,
            error_jy / zero_jy,
            _WISE_W4 if band == "W4" else _WISE,
            *_VEGA_2014,
        )
        for band, zero_jy, error_jy in (
            ("W1", 309.540, 4.582),
            ("W2", 171.787, 2.516),
            ("W3", 31.674, 0.450),
            ("W4", 8.363, 0.124),
        )
    ),
    *(_ab(f"decam_{band.lower()}", f"decam2014-{band}", 0.01, _DECAM) for band in "ugrizY"),
    *(_ab(f"rubin_{band}", f"lsst2023-{band}", 0.01, _RUBIN) for band in "ugrizy"),
    *(_ab(f"euclid_{band.lower()}", f"Euclid-{band}", 0.02, _EUCLID) for band in ("VIS", "Y", "J", "H")),
)

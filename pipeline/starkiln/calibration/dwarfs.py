"""Individual nearby K and M dwarfs of published temperature and radius: Cifuentes et al. 2020, A&A 642, A115."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starkiln.physics.constants import TSUN_K

FloatArray = NDArray[np.float64]

SOURCE = "nearby K and M dwarfs of Cifuentes et al. 2020, A&A 642, A115"

PASSBANDS = {
    "FUV": "galex_fuv",
    "NUV": "galex_nuv",
    "u": "sdss_u",
    "B": "johnson_b",
    "g": "sdss_g",
    "BP": "gaia_dr2_bp",
    "V": "johnson_v",
    "r": "sdss_r",
    "G": "gaia_dr2_g",
    "i": "sdss_i",
    "RP": "gaia_dr2_rp",
    "J": "2mass_j",
    "H": "2mass_h",
    "Ks": "2mass_ks",
    "W1": "wise_w1",
    "W2": "wise_w2",
    "W3": "wise_w3",
    "W4": "wise_w4",
}
"""The passband of each magnitude of the table; BT and VT have no built-in one."""

_PLACEHOLDER_MAG = 0.99  # stands for an error not known
_LARGEST_ERROR_MAG = 1.0
_SPURIOUS = ("Bool_delta", "Bool_RUWE")  # close companions, known or told by the astrometry


@dataclass(frozen=True, eq=False)
class Dwarfs:
    """Stars with published temperature and luminosity, and without a known close companion.

    Attributes
    ----------
    teff_k, radius_rsun, distance_pc
        (n_stars,): published temperature [K], on a grid of 100 K; radius [R_sun] from the published luminosity and
        that temperature; distance [pc].
    passbands
        Names of the bands.
    magnitude, error
        (n_stars, n_bands): in each passband's own system, NaN where missing or marked as poor.
    """

    teff_k: FloatArray
    radius_rsun: FloatArray
    distance_pc: FloatArray
    passbands: tuple[str, ...]
    magnitude: FloatArray
    error: FloatArray

    def only(self, stars: NDArray[Any] | slice) -> Dwarfs:
        """Return some of the stars."""
        return Dwarfs(
            self.teff_k[stars],
            self.radius_rsun[stars],
            self.distance_pc[stars],
            self.passbands,
            self.magnitude[stars],
            self.error[stars],
        )

    def without(self, passbands: set[str]) -> Dwarfs:
        """Return the same stars without some of their bands."""
        kept = [place for place, name in enumerate(self.passbands) if name not in passbands]
        return Dwarfs(
            self.teff_k,
            self.radius_rsun,
            self.distance_pc,
            tuple(self.passbands[place] for place in kept),
            self.magnitude[:, kept],
            self.error[:, kept],
        )


def read_dwarfs(path: Path) -> Dwarfs:
    """Return the nearby dwarfs that have a published temperature and no known close companion."""
    from astropy.table import Table

    table = Table.read(path, format="ascii.csv")
    spurious = np.any([_is_true(table[name]) for name in _SPURIOUS], axis=0)
    teff_k, lum_lsun, distance_pc = (_floats(table[name]) for name in ("teff_pub", "lbol_pub", "d_pc"))
    kept = ~spurious & np.isfinite(teff_k) & np.isfinite(lum_lsun) & np.isfinite(distance_pc)
    magnitude = np.stack([_floats(table[f"{band}_mag"]) for band in PASSBANDS], axis=1)
    error = np.stack([_floats(table[f"e{band}_mag"]) for band in PASSBANDS], axis=1)
    poor = np.stack([_is_true(table[f"Qf_{band}"]) for band in PASSBANDS], axis=1)
    usable = ~poor & (error > 0.0) & (error != _PLACEHOLDER_MAG) & (error < _LARGEST_ERROR_MAG)
    usable &= np.isfinite(magnitude)
    return Dwarfs(
        teff_k=teff_k[kept],
        radius_rsun=(np.sqrt(lum_lsun) * (TSUN_K / teff_k) ** 2)[kept],
        distance_pc=distance_pc[kept],
        passbands=tuple(PASSBANDS.values()),
        magnitude=np.where(usable, magnitude, np.nan)[kept],
        error=np.where(usable, error, np.nan)[kept],
    )


def _floats(column: Any) -> FloatArray:
    if hasattr(column, "filled"):
        return np.asarray(column.astype(np.float64).filled(np.nan), dtype=np.float64)
    return np.asarray(column, dtype=np.float64)


def _is_true(column: Any) -> NDArray[np.bool_]:
    return np.array([str(value).lower() == "true" for value in column], dtype=bool)

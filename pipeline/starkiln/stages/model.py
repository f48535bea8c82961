"""What a run's settings mean to the fit: passbands, the band table and the priors, built once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.posterior import Grid, Prior
from starkiln.physics.bandtable import BandTable
from starkiln.physics.constants import PARSEC_M, RSUN_M
from starkiln.physics.passbands import Passband
from starkiln.settings import Settings
from starkiln.settings.models import PhotometryColumns
from starkiln.stages.bands import build_bands

METHOD_VERSION = 1
"""Goes up with every change of the method that changes a number of the catalogue."""

LN_RSUN_PC = float(np.log(RSUN_M / PARSEC_M))


@dataclass(frozen=True)
class FitModel:
    """The model of a run, shared by all its stars.

    Attributes
    ----------
    passbands
        By label, in the order of the settings.
    floor
        (B,): each band's fractional floor with the error of its zero point, in quadrature.
    table
        Band fluxes against temperature and A_V.
    grid, prior
        The table and the priors, as the kernels take them.
    ln_radius_bounds_pc
        Bounds on ln R, R in parsecs.
    """

    passbands: dict[str, Passband]
    floor: NDArray[np.float64]
    table: BandTable
    grid: Grid
    prior: Prior
    ln_radius_bounds_pc: tuple[float, float]

    def digests(self) -> dict[str, str]:
        """Return the digest of each label's curve, detector and zero point."""
        return {label: passband.digest() for label, passband in self.passbands.items()}


def build_model(settings: Settings) -> FitModel:
    """Build the model that the settings describe.

    Raises
    ------
    SettingsError
        If a passband, a zero point or the extinction law is not known, or there are too few walkers.
    """
    passbands, table = build_bands(settings)
    extinction = settings.model.extinction
    teff_min, teff_max = settings.model.temperature_k
    radius_min, radius_max = np.log(settings.model.radius_rsun) + LN_RSUN_PC
    distance_min, distance_max = np.log(settings.model.distance.bounds_pc)
    outliers = settings.model.outliers
    prior = Prior(
        ln_teff_min=float(np.log(teff_min)),
        ln_teff_max=float(np.log(teff_max)),
        ln_omega_min=float(2.0 * (radius_min - distance_max)),
        ln_omega_max=float(2.0 * (radius_max - distance_min)),
        av_max=extinction.max,
        fit_av=extinction.prior != "fixed",
        outlier_fraction=outliers.fraction if outliers else 0.0,
        outlier_width=outliers.width if outliers else 10.0,
    )
    n_rows, n_columns = table.coef.shape[1:]
    return FitModel(
        passbands=passbands,
        floor=np.array([_floor(band, passbands[band.label]) for band in settings.input.photometry]),
        table=table,
        grid=Grid(table.coef.ravel(), n_rows, n_columns, table.ln_teff_min, table.ln_teff_step, table.av_step),
        prior=prior,
        ln_radius_bounds_pc=(float(radius_min), float(radius_max)),
    )


def _floor(band: PhotometryColumns, passband: Passband) -> float:
    zero_point_error = passband.zero_point_error if band.zero_point_error is None else band.zero_point_error
    return float(np.hypot(band.floor, zero_point_error))

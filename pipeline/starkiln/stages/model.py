"""What a run's settings mean to the fit: passbands, the band table and the priors, built once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starkiln.errors import SettingsError, UnknownPassband, nearest
from starkiln.inference.posterior import Grid, Prior, n_parameters
from starkiln.physics.bandtable import BandTable, build_band_table
from starkiln.physics.constants import PARSEC_M, RSUN_M
from starkiln.physics.extinction import law_names
from starkiln.physics.passbands import Passband, builtin_names, load_passband, read_passband, zero_point_jy
from starkiln.settings import Settings
from starkiln.settings.models import PhotometryColumns

METHOD_VERSION = 1
"""Goes up with every change of the method that changes a number of the catalogue."""

LN_JITTER_MIN = float(np.log(1e-3))
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
    passbands = {
        band.label: _passband(settings, band, f"input.photometry[{place}]")
        for place, band in enumerate(settings.input.photometry)
    }
    extinction = settings.model.extinction
    if extinction.law not in law_names():
        raise SettingsError(
            f"model.extinction.law: no law is named {extinction.law!r}{nearest(extinction.law, law_names())}; "
            f"known are {', '.join(law_names())}"
        )
    teff_min, teff_max = settings.model.temperature_k
    table = build_band_table(
        list(passbands.values()), teff_min, teff_max, extinction.max, extinction.law, extinction.rv
    )
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
        fit_jitter=False,
        ln_jitter_min=LN_JITTER_MIN,
    )
    n_rows, n_columns = table.coef.shape[1:]
    grid = Grid(
        coef=table.coef.ravel(),
        n_rows=n_rows,
        n_columns=n_columns,
        ln_teff_min=table.ln_teff_min,
        ln_teff_step=table.ln_teff_step,
        av_step=table.av_step,
        loading=np.zeros((0, len(passbands), n_rows)),
        scatter=np.zeros((len(passbands), n_rows)),
    )
    needed = 2 * (n_parameters(grid, prior) + 1)
    if settings.sampling.walkers < needed:
        raise SettingsError(
            f"sampling.walkers is {settings.sampling.walkers}: {n_parameters(grid, prior)} parameters need at least "
            f"{needed}"
        )
    return FitModel(
        passbands=passbands,
        floor=np.array([_floor(band, passbands[band.label]) for band in settings.input.photometry]),
        table=table,
        grid=grid,
        prior=prior,
        ln_radius_bounds_pc=(float(radius_min), float(radius_max)),
    )


def _passband(settings: Settings, band: PhotometryColumns, key: str) -> Passband:
    own = {file.name: file for file in settings.passband}
    if band.passband in own:
        file = own[band.passband]
        passband = read_passband(
            file.curve, file.name, file.detector, file.zero_point_jy, file.zero_point_error, file.source
        )
    else:
        try:
            passband = load_passband(band.passband)
        except UnknownPassband as error:
            near = nearest(band.passband, own) if band.passband not in builtin_names() else ""
            raise UnknownPassband(f"{key}.passband: {error}{near}") from None
    if band.system is not None and band.zero_point_jy is None:
        try:
            zero_point_jy(passband, band.system)
        except SettingsError as error:
            raise SettingsError(f"{key}.system: {error}") from None
    return passband


def _floor(band: PhotometryColumns, passband: Passband) -> float:
    zero_point_error = passband.zero_point_error if band.zero_point_error is None else band.zero_point_error
    return float(np.hypot(band.floor, zero_point_error))

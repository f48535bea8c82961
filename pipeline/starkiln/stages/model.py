"""What a run's settings mean to the fit: passbands, the band table and the priors, built once."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.posterior import Grid, Prior
from starkiln.physics.bandtable import BandTable, spline_coefficients
from starkiln.physics.constants import PARSEC_M, RSUN_M
from starkiln.physics.departures import Departures
from starkiln.physics.passbands import Passband
from starkiln.settings import Settings
from starkiln.settings.models import PhotometryColumns
from starkiln.stages.bands import build_bands

METHOD_VERSION = 5
"""Goes up with every change of the method that changes a number of the catalogue."""

LN_JITTER_MIN = float(np.log(1e-3))
LN_RSUN_PC = float(np.log(RSUN_M / PARSEC_M))


@dataclass(frozen=True)
class FitModel:
    """The model of a run, shared by all its stars.

    Attributes
    ----------
    photosphere
        "blackbody" or "calibrated".
    passbands
        By label, in the order of the settings.
    floor
        (B,): each band's fractional floor with the error of its zero point, in quadrature. Where departures were
        learnt with the built-in zero point they have its error in them, and only the floor is left.
    table
        Band fluxes against temperature and A_V, departures included.
    grid, prior
        The table, the factors and the priors, as the kernels take them.
    ln_radius_bounds_pc
        Bounds on ln R, R in parsecs.
    departures
        Of the bands, in their order; None for a blackbody.
    off_scale
        (2, n_teff): at the table's nodes, scatter of stars about the departures' scale, in ln T at their luminosity and
        in ln L at their temperature.
    rival
        The blackbody that each star may prefer, for photosphere = "auto".
    """

    photosphere: str
    passbands: dict[str, Passband]
    floor: NDArray[np.float64]
    table: BandTable
    grid: Grid
    prior: Prior
    ln_radius_bounds_pc: tuple[float, float]
    departures: Departures | None
    off_scale: NDArray[np.float64]
    rival: FitModel | None

    @property
    def first_factor(self) -> int:
        """The place of z_1 among a walker's coordinates."""
        return 3 if self.prior.fit_av else 2

    def off_scale_at(self, ln_teff: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return the scatter in ln T and in ln L about the departures' scale, straight between the table's nodes."""
        nodes = self.table.ln_teff_min + self.table.ln_teff_step * np.arange(self.table.n_teff)
        tau, gamma = (np.interp(ln_teff, nodes, values) for values in self.off_scale)
        return tau, gamma

    def digests(self) -> dict[str, str]:
        """Return the digest of each label's curve, detector and zero point."""
        return {label: passband.digest() for label, passband in self.passbands.items()}

    def departures_digest(self) -> str:
        """Return the SHA-256 of what the departures add to the bands; empty for a blackbody."""
        if self.departures is None:
            return ""
        digest = hashlib.sha256()
        learnt = self.departures
        for values in (learnt.ln_d, learnt.loading, learnt.scatter, self.off_scale):
            digest.update(np.ascontiguousarray(values, dtype="<f8").tobytes())
        return digest.hexdigest()


def build_model(settings: Settings) -> FitModel:
    """Build the model that the settings describe.

    Raises
    ------
    SettingsError
        If a passband, a zero point, the extinction law or the departures are not known or do not fit together, or
        there are too few walkers.
    """
    passbands, table, departures = build_bands(settings)
    prior, ln_radius_bounds = _prior(settings)
    photometry = settings.input.photometry
    floor = np.array([np.hypot(band.floor, zero_point_error(band, passbands[band.label])) for band in photometry])

    def blackbody(scatter: float) -> FitModel:
        grid = _grid(
            table, np.zeros((0, len(passbands), table.n_teff)), np.full((len(passbands), table.n_teff), scatter)
        )
        no_scatter = np.zeros((2, table.n_teff))
        return FitModel("blackbody", passbands, floor, table, grid, prior, ln_radius_bounds, None, no_scatter, None)

    if departures is None:
        return blackbody(0.0)
    at_nodes = departures.at(table.teff_nodes_k)
    lifted = replace(table, coef=table.coef + spline_coefficients(at_nodes.ln_d.T).T[:, :, np.newaxis])
    own_error = np.array([band.zero_point_error is not None for band in photometry])
    return FitModel(
        photosphere="calibrated",
        passbands=passbands,
        floor=np.where(departures.served & ~own_error, [band.floor for band in photometry], floor),
        table=lifted,
        grid=_grid(lifted, at_nodes.loading, at_nodes.scatter),
        prior=prior,
        ln_radius_bounds_pc=ln_radius_bounds,
        departures=departures,
        off_scale=np.stack([at_nodes.temperature_scatter, at_nodes.luminosity_scatter]),
        rival=blackbody(settings.model.blackbody.scatter) if settings.model.photosphere == "auto" else None,
    )


def _prior(settings: Settings) -> tuple[Prior, tuple[float, float]]:
    radius_min, radius_max = np.log(settings.model.radius_rsun) + LN_RSUN_PC
    distance_min, distance_max = np.log(settings.model.distance.bounds_pc)
    teff_min, teff_max = settings.model.temperature_k
    outliers, extinction = settings.model.outliers, settings.model.extinction
    prior = Prior(
        ln_teff_min=float(np.log(teff_min)),
        ln_teff_max=float(np.log(teff_max)),
        ln_omega_min=float(2.0 * (radius_min - distance_max)),
        ln_omega_max=float(2.0 * (radius_max - distance_min)),
        av_max=extinction.max,
        fit_av=extinction.prior != "fixed",
        outlier_fraction=outliers.fraction if outliers else 0.0,
        outlier_width=outliers.width if outliers else 10.0,
        fit_jitter=settings.model.jitter,
        ln_jitter_min=LN_JITTER_MIN,
    )
    return prior, (float(radius_min), float(radius_max))


def _grid(table: BandTable, loading: NDArray[np.float64], scatter: NDArray[np.float64]) -> Grid:
    """Return the kernels' grid; loading (K, B, n_teff) and scatter (B, n_teff) are given at the table's nodes."""
    n_bands, n_rows, n_columns = table.coef.shape
    spline = np.zeros((len(loading), n_bands, n_rows))
    for factor, of_bands in enumerate(loading):
        spline[factor] = spline_coefficients(of_bands.T).T
    return Grid(
        coef=table.coef.ravel(),
        n_rows=n_rows,
        n_columns=n_columns,
        ln_teff_min=table.ln_teff_min,
        ln_teff_step=table.ln_teff_step,
        av_step=table.av_step,
        loading=spline,
        scatter=np.ascontiguousarray(spline_coefficients(scatter.T).T),
    )


def zero_point_error(band: PhotometryColumns, passband: Passband) -> float:
    """Return the fractional error of a band's zero point: its own where the settings give one, or the passband's."""
    return passband.zero_point_error if band.zero_point_error is None else band.zero_point_error

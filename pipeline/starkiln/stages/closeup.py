"""One star in full: its joint draws, and what each of its bands says beside the model."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from starkiln.inference.posterior import Block, band_model, make_lanes, spline_weights
from starkiln.physics.bandtable import ln_flux
from starkiln.physics.constants import MAS_PER_RAD
from starkiln.settings import Settings
from starkiln.stages.choose import choose
from starkiln.stages.derive import Derived, derive
from starkiln.stages.fit import Fitted, fit
from starkiln.stages.ingest import fault_words, ingest, read_band
from starkiln.stages.model import FitModel
from starkiln.stages.summarise import Columns, mode_points, summarise

SPREAD_DRAWS = 200
"""Joint draws whose spread is drawn about the model."""


class Spectrum(NamedTuple):
    """What a blackbody behind dust hangs on: T [K], (R/d)^2 and A_V [mag], one of each or as many draws."""

    teff_k: NDArray[np.float64]
    omega: NDArray[np.float64]
    av_mag: NDArray[np.float64]


@dataclass(frozen=True)
class BandValue:
    """One band of one star.

    Attributes
    ----------
    flux_jy, error_jy
        As observed, for a limit the limit and the error it was drawn at; None where there is no number.
    use
        "used", "limit" or "not used".
    why
        Why it is not used; empty where it is.
    """

    label: str
    passband: str
    pivot_um: float
    flux_jy: float | None
    error_jy: float | None
    use: str
    why: str


class BandModel(NamedTuple):
    """The model in every band (B,), departures included: fluxes and the error that residuals are in units of [Jy]."""

    flux_jy: NDArray[np.float64]
    low_jy: NDArray[np.float64]
    high_jy: NDArray[np.float64]
    spread: NDArray[np.float64]


@dataclass(frozen=True)
class CloseUp:
    """One star, fitted again with all its draws.

    Attributes
    ----------
    columns
        What the catalogue says of it, all but ``row_hash``, each an array of one.
    draws
        Joint draws by the names of the catalogue's quantities.
    mode, spread
        The blackbody behind dust at the posterior mode, and at evenly spaced joint draws.
    bands
        The model in each band at the mode; low and high are the central 68 % of the draws.
    """

    photosphere: str
    columns: Columns
    draws: dict[str, NDArray[np.float64]]
    mode: Spectrum
    spread: Spectrum
    bands: BandModel


def observed_bands(table: pa.Table, settings: Settings, model: FitModel) -> list[BandValue]:
    """Return what the only row of a table holds in each band, and whether the fit uses it."""
    found = []
    for band in settings.input.photometry:
        passband = model.passbands[band.label]
        values = read_band(table, band, passband)
        flux, error = float(values.flux_jy[0]), float(values.error_jy[0])
        why = fault_words(int(values.fault[0]), band)
        has_flux = np.isfinite(flux) and not why.startswith(f"{band.value} ")
        use = "not used" if why else "limit" if values.limit[0] else "used"
        found.append(
            BandValue(
                label=band.label,
                passband=passband.name,
                pivot_um=passband.pivot_um,
                flux_jy=flux if has_flux else None,
                error_jy=error if has_flux and np.isfinite(error) and error > 0 else None,
                use=use,
                why=why,
            )
        )
    return found


def close_up(table: pa.Table, settings: Settings, model: FitModel) -> CloseUp:
    """Fit the only row of a table, which must be one that is not rejected, as a run does, and keep all of it."""
    stars = ingest(table, settings, model).stars
    chosen, ln_ratio = model, None
    if model.rival is not None:
        is_blackbody, ln_ratio = choose(stars, model, settings)
        chosen = model.rival if is_blackbody[0] else model
    (fitted,) = fit(stars, chosen, settings)
    derived = derive(stars, fitted.draws, chosen, settings, fitted.block.factor_scale)
    mode = mode_points(fitted, derived, chosen)
    columns = summarise(stars, fitted, derived, mode, chosen, settings)
    if ln_ratio is not None:
        columns["ln_evidence_ratio"] = ln_ratio
    spread = _joint_points(fitted, derived, chosen)
    at_mode, at_draws = _in_bands(mode[0], fitted.block, chosen), _in_bands(spread, fitted.block, chosen)
    low, high = np.quantile(at_draws[0], [0.16, 0.84], axis=1)
    return CloseUp(
        photosphere=chosen.photosphere,
        columns=columns,
        draws=_draws(derived),
        mode=_spectrum(mode[0]),
        spread=_spectrum(spread),
        bands=BandModel(at_mode[0][:, 0], low, high, at_mode[1][:, 0]),
    )


def _draws(derived: Derived) -> dict[str, NDArray[np.float64]]:
    logarithms = {
        "teff": derived.ln_teff,
        "radius": derived.ln_radius,
        "lum": derived.ln_lum,
        "dist": derived.ln_dist,
        "ang_diam": derived.ln_ang_diam,
        "fbol": derived.ln_fbol,
    }
    return {name: np.exp(values[0]) for name, values in logarithms.items()} | {"av": np.array(derived.av[0])}


def _joint_points(fitted: Fitted, derived: Derived, model: FitModel) -> NDArray[np.float64]:
    """Return evenly spaced joint draws, (P, SPREAD_DRAWS): ln T, ln Omega, A_V and the rest, as the bands see them."""
    places = np.linspace(0, derived.source.shape[1] - 1, SPREAD_DRAWS).astype(np.int64)
    chain = fitted.draws.chain[0][:, derived.source[0, places]]
    if model.prior.fit_av:
        return np.ascontiguousarray(chain)
    return np.concatenate([chain[:2], derived.av[:1, places], chain[2:]])


def _spectrum(points: NDArray[np.float64]) -> Spectrum:
    return Spectrum(np.exp(points[0]), np.exp(points[1]), points[2].copy())


def _in_bands(points: NDArray[np.float64], block: Block, model: FitModel) -> tuple[NDArray[np.float64], ...]:
    """Return (B, L) the flux in Jy in every band, used or not, and its fractional spread about the model."""
    n_factors, n_bands = len(model.grid.loading), len(model.floor)
    points = np.ascontiguousarray(points)
    # All bands as if they were used, so that a band without data has a model, too.
    order = np.arange(n_bands)[None]
    every = block._replace(n_bands=np.array([n_bands]), band=order, floor=model.floor[order])
    lanes = make_lanes(points.shape[1], n_factors)
    lanes.z[:] = points[3 : 3 + n_factors]
    if model.prior.fit_jitter:
        lanes.jitter2[:] = np.exp(2.0 * points[3 + n_factors])
    spline_weights(points[0], points[2], model.grid, lanes)
    flux_jy, spread = np.empty((n_bands, points.shape[1])), np.empty((n_bands, points.shape[1]))
    for band in range(n_bands):
        band_model(model.grid, every, 0, band, lanes)
        flux_jy[band], spread[band] = np.exp(lanes.flux + points[1]), np.sqrt(lanes.spread2)
    return flux_jy, spread


def at_medians(teff_k: float, ang_diam_mas: float, av_mag: float, model: FitModel) -> tuple[Spectrum, BandModel]:
    """Return the model at given values, where there are no draws: mean departures, and no spread."""
    omega = (0.5 * ang_diam_mas / MAS_PER_RAD) ** 2
    flux_jy = omega * np.exp(ln_flux(model.table, teff_k, av_mag)[0])
    spectrum = Spectrum(np.array([teff_k]), np.array([omega]), np.array([av_mag]))
    return spectrum, BandModel(flux_jy, flux_jy, flux_jy, np.full(len(flux_jy), np.nan))

"""Stars simulated from the model and its priors, for tests and benchmarks."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from starkiln.physics.bandtable import ln_flux
from starkiln.physics.constants import MAS_PER_RAD, PARSEC_M, RSUN_M, TSUN_K
from starkiln.settings import Settings, build_settings
from starkiln.stages.model import FitModel
from starkiln.stages.stars import Stars

THIRTEEN_BANDS = (
    "gaia_dr3_bp",
    "gaia_dr3_g",
    "gaia_dr3_rp",
    "panstarrs_g",
    "panstarrs_r",
    "panstarrs_i",
    "panstarrs_z",
    "panstarrs_y",
    "2mass_j",
    "2mass_h",
    "2mass_ks",
    "wise_w1",
    "wise_w2",
)
LN_RSUN_PC = float(np.log(RSUN_M / PARSEC_M))


def make_settings(bands: tuple[str, ...] = THIRTEEN_BANDS, floor: float = 0.01, **sections: Any) -> Settings:
    """Return settings for fluxes in Jy, with columns named after the bands."""
    photometry = [
        {
            "passband": band,
            "value": f"flux_{band}",
            "error": f"error_{band}",
            "unit": "Jy",
            "floor": floor,
            "limit": f"limit_{band}",
        }
        for band in bands
    ]
    parallax = {"value": "parallax", "error": "parallax_error", "unit": "mas"}
    values = {
        "run": {"name": "simulated", "output": "/nowhere/run", "seed": 7},
        "input": {
            "tables": "/nowhere/stars.parquet",
            "id": "id",
            "parallax": parallax,
            "photometry": photometry,
        },
        **sections,
        "model": {"photosphere": "blackbody"} | sections.get("model", {}),
    }
    return build_settings(values)


def simulate(
    settings: Settings,
    model: FitModel,
    n: int,
    seed: int,
    noise: tuple[float, float] = (0.01, 0.05),
    parallax_error_mas: tuple[float, float] = (0.02, 0.5),
    shallow: float = 0.0,
) -> tuple[Stars, dict[str, NDArray[np.float64]]]:
    """Draw stars from the priors of the settings, and their data from the likelihood, outliers included.

    Parameters
    ----------
    noise
        Range of the errors, as shares of the flux of a star of 4500 K and 0.7 R_sun at twice the length scale: they
        know nothing of the star's own flux.
    shallow
        Chance that a band has a threshold, below which only an upper limit is reported.
    """
    rng = np.random.default_rng(seed)
    b = len(model.floor)
    ln_teff = rng.uniform(*np.log(settings.model.temperature_k), n)
    ln_radius = rng.uniform(*np.log(settings.model.radius_rsun), n)
    length = float(settings.model.distance.length_scale_pc)
    scale = float(settings.model.extinction.scale)
    dist_pc = rng.gamma(3.0, length, n)
    av = np.zeros(n)
    if model.prior.fit_av:
        av = np.abs(rng.normal(0.0, scale, n))
        while (high := av > model.prior.av_max).any():
            av[high] = np.abs(rng.normal(0.0, scale, high.sum()))
    ln_omega = 2.0 * (ln_radius + LN_RSUN_PC - np.log(dist_pc))
    true_jy = np.exp(ln_flux(model.table, np.exp(ln_teff), av) + ln_omega[:, None])
    typical_jy = np.exp(ln_flux(model.table, 4500.0, scale) + 2.0 * (np.log(0.7) + LN_RSUN_PC - np.log(2.0 * length)))
    error_jy = typical_jy * np.exp(rng.uniform(*np.log(noise), (n, b)))
    total = np.hypot(error_jy, model.floor * true_jy)
    width = np.where(rng.random((n, b)) < model.prior.outlier_fraction, model.prior.outlier_width, 1.0)
    threshold_jy = np.where(rng.random((n, b)) < shallow, typical_jy * rng.uniform(0.3, 3.0, (n, b)), -np.inf)
    # Censoring has no outliers in the likelihood, so a band with a threshold has none here.
    width[np.isfinite(threshold_jy)] = 1.0
    flux_jy = true_jy + width * total * rng.normal(size=(n, b))
    limit = flux_jy < threshold_jy
    parallax_error = np.exp(rng.uniform(*np.log(parallax_error_mas), n))
    stars = Stars(
        ids=[b"%d" % k for k in range(n)],
        flux_jy=np.where(limit, threshold_jy, flux_jy),
        error_jy=error_jy,
        usable=np.ones((n, b), bool),
        limit=limit,
        parallax_mas=1e3 / dist_pc + parallax_error * rng.normal(size=n),
        parallax_error_mas=parallax_error,
        distance_pc=np.full(n, np.nan),
        distance_error_pc=np.full(n, np.nan),
        av_mean=np.zeros(n),
        av_scale=np.full(n, scale),
        length_scale_pc=np.full(n, length),
    )
    truth = {
        "teff": np.exp(ln_teff),
        "radius": np.exp(ln_radius),
        "lum": np.exp(2.0 * ln_radius + 4.0 * (ln_teff - np.log(TSUN_K))),
        "dist": dist_pc,
        "av": av,
        "ang_diam": 2.0 * np.exp(0.5 * ln_omega) * MAS_PER_RAD,
    }
    return stars, truth

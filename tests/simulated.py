"""Stars simulated from the model and its priors, for tests and benchmarks."""

from __future__ import annotations

from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from starkiln.physics.bandtable import ln_flux
from starkiln.physics.constants import MAS_PER_RAD, PARSEC_M, RSUN_M, TSUN_K
from starkiln.physics.departures import LN_TEFF_NODES, Departures
from starkiln.physics.passbands import load_passband
from starkiln.settings import Settings, build_settings
from starkiln.stages.fit import giant_scale
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
    given = sections.get("input", {})
    parallax = {"value": "parallax", "error": "parallax_error", "unit": "mas"}
    values = {
        "run": {"name": "simulated", "output": "/nowhere/run", "seed": 7},
        **sections,
        "input": {"tables": "/nowhere/stars.parquet", "id": "id", "photometry": photometry}
        | ({} if "distance" in given else {"parallax": parallax})
        | given,
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
    giants: bool = False,
) -> tuple[Stars, dict[str, NDArray[np.float64]]]:
    """Draw stars from the priors of the settings, and their data from the likelihood, outliers included.

    The stars of a calibrated model have departures, common factors z_k ~ N(0, 1) and each band's own scatter; with
    jitter fitted, ln jitter is uniform within its bounds. Where a parameter of the A_V prior is a column, each star
    gets its own.

    Parameters
    ----------
    noise
        Range of the errors, as shares of the flux of a star of 4500 K and 0.7 R_sun at twice the length scale: they
        know nothing of the star's own flux.
    shallow
        Chance that a band has a threshold, below which only an upper limit is reported.
    giants
        Whether cool giants have wider factors, by their true radius. The fit judges that by the first peak, so on
        stars near the limit it is not the model that made the data.
    """
    rng = np.random.default_rng(seed)
    b = len(model.floor)
    # What the bands show lies on the departures' scale, about which the truth scatters.
    seen_ln_teff = rng.uniform(*np.log(settings.model.temperature_k), n)
    tau, gamma = model.off_scale_at(seen_ln_teff)
    warmer, brighter = rng.normal(size=(2, n)) if model.off_scale.any() else np.zeros((2, n))
    ln_teff = np.clip(seen_ln_teff + tau * warmer, *np.log(settings.model.temperature_k))
    ln_radius = rng.uniform(*np.log(settings.model.radius_rsun), n)
    length = float(settings.model.distance.length_scale_pc)
    dist_pc = rng.gamma(3.0, length, n)
    av_mean, av_scale = _av_parameters(settings, n, rng)
    av = _draw_av(settings, av_mean, av_scale, rng)
    ln_omega = 2.0 * (ln_radius + LN_RSUN_PC - np.log(dist_pc))
    seen_ln_omega = ln_omega + 4.0 * (ln_teff - seen_ln_teff) - gamma * brighter
    true_jy = np.exp(ln_flux(model.table, np.exp(seen_ln_teff), av) + seen_ln_omega[:, None])
    typical_av = float(np.median(av_scale))
    typical_jy = np.exp(
        ln_flux(model.table, 4500.0, typical_av) + 2.0 * (np.log(0.7) + LN_RSUN_PC - np.log(2.0 * length))
    )
    error_jy = typical_jy * np.exp(rng.uniform(*np.log(noise), (n, b)))
    photosphere: dict[str, NDArray[np.float64]] = {}
    spread = np.broadcast_to(model.floor, (n, b))
    if model.departures is not None:
        widening = giant_scale(np.exp(ln_teff), np.exp(ln_radius)) if giants else np.ones(n)
        at = model.departures.at(np.exp(seen_ln_teff))
        z = rng.normal(size=(len(at.loading), n))
        true_jy = true_jy * np.exp(widening[:, None] * (at.loading * z[:, None]).sum(axis=0).T)
        spread = np.hypot(spread, widening[:, None] * at.scatter.T)
        photosphere = {f"z{k + 1}": values for k, values in enumerate(z)} | {"factor_scale": widening}
    if model.prior.fit_jitter:
        photosphere["jitter"] = np.exp(rng.uniform(model.prior.ln_jitter_min, 0.0, n))
        spread = np.hypot(spread, photosphere["jitter"][:, None])
    total = np.hypot(error_jy, spread * true_jy)
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
        av_mean=av_mean,
        av_scale=av_scale,
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
    return stars, truth | photosphere


def _av_parameters(
    settings: Settings, n: int, rng: np.random.Generator
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return each star's mean and scale of the prior of A_V; a column's values are drawn here."""
    mean, scale = settings.model.extinction.mean, settings.model.extinction.scale
    return (
        rng.uniform(0.2, 1.5, n) if isinstance(mean, str) else np.full(n, mean),
        rng.uniform(0.05, 0.4, n) if isinstance(scale, str) else np.full(n, scale),
    )


def _draw_av(
    settings: Settings, mean: NDArray[np.float64], scale: NDArray[np.float64], rng: np.random.Generator
) -> NDArray[np.float64]:
    """Draw A_V from its prior, again where it falls outside the bounds."""
    extinction = settings.model.extinction
    if extinction.prior == "fixed":
        return mean.copy()
    av = np.full(len(mean), -1.0)
    while (bad := (av < 0.0) | (av > extinction.max)).any():
        if extinction.prior == "exponential":
            av[bad] = rng.exponential(scale[bad])
        elif extinction.prior == "half-normal":
            av[bad] = np.abs(rng.normal(0.0, scale[bad]))
        else:
            av[bad] = rng.normal(mean[bad], scale[bad])
    return av


def invented_departures(bands: tuple[str, ...] = THIRTEEN_BANDS, n_factors: int = 1) -> Departures:
    """Return smooth departures that nobody has measured, with common factors, on the standard nodes."""
    passbands = [load_passband(band) for band in bands]
    pivot_um = np.array([passband.pivot_um for passband in passbands])
    colour, x = np.log(pivot_um)[:, None], (LN_TEFF_NODES - np.log(5500.0))[None]
    shapes = [0.06 + 0.0 * x - 0.04 * colour - 0.05 * np.tanh(2.0 * x), 0.03 * np.sin(2.5 * colour) * np.exp(-(x**2))]
    return Departures(
        bands=bands,
        digests=tuple(passband.digest() for passband in passbands),
        kind=("stars",) * len(bands),
        source=("invented",) * len(bands),
        pivot_um=pivot_um,
        range_k=np.tile(np.exp(LN_TEFF_NODES[[0, -1]]), (len(bands), 1)),
        ln_d=0.15 * np.tanh(1.5 * x) * np.exp(-0.7 * colour) + 0.05 * np.sin(3.0 * x + colour),
        loading=np.array(shapes[:n_factors]).reshape(n_factors, *(0.0 * colour + x).shape),
        scatter=0.012 + 0.01 * np.exp(-0.5 * (x + 0.5) ** 2) + 0.0 * colour,
        factors=("first", "second")[:n_factors],
        provenance={"curve": "invented"},
    )


def as_table(stars: Stars, settings: Settings, **columns: Any) -> pa.Table:
    """Return stars as a part's input table, with the columns that the settings name; others by keyword.

    Zero points and error scales that are columns must be given by keyword, and are taken to be in the parallaxes.
    """
    n = len(stars)
    table: dict[str, Any] = {settings.input.id: pa.array([int(star_id) for star_id in stars.ids], pa.int64())}
    for place, band in enumerate(settings.input.photometry):
        table[band.value], table[band.error] = stars.flux_jy[:, place], stars.error_jy[:, place]
        if band.limit is not None:
            table[band.limit] = stars.limit[:, place]
    if parallax := settings.input.parallax:
        table |= {parallax.value: stars.parallax_mas, parallax.error: stars.parallax_error_mas}
    if distance := settings.input.distance:
        table |= {distance.value: stars.distance_pc, distance.error: stars.distance_error_pc}
    extinction = settings.model.extinction
    for name, values in ((extinction.mean, stars.av_mean), (extinction.scale, stars.av_scale)):
        if isinstance(name, str):
            table[name] = values
    table |= {"_input_file": ["stars.parquet"] * n, "_input_row": np.arange(n), "_duplicate": np.zeros(n, np.int8)}
    return pa.table(table | columns)

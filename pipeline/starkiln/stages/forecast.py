"""The precision to expect from bands and errors: invented stars through the stages that real ones go through."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
from astropy import units as u
from astropy.table import Row, Table
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri
from scipy.stats import binom

from starkiln import __version__
from starkiln.errors import SettingsError
from starkiln.flags import BY_NAME
from starkiln.inference.streams import star_streams
from starkiln.physics.bandtable import ln_flux
from starkiln.physics.passbands import zero_point_jy
from starkiln.settings import Settings
from starkiln.settings.forecast import ALL_BANDS, ForecastSettings
from starkiln.settings.models import Extinction
from starkiln.stages.derive import LN_LUM_COEFFICIENT
from starkiln.stages.fit import giant_scale
from starkiln.stages.ingest import LN_FLUX_PER_MAG
from starkiln.stages.model import LN_RSUN_PC, METHOD_VERSION, FitModel, build_model
from starkiln.stages.process import process_part

QUANTITIES = ("teff", "radius", "lum")
DEPTH_SIGMA = 5.0
MISLED_SHARE, MISLED_CHANCE = 1.0 / 3.0, 1e-3
ROWS_AT_ONCE = 256

FloatArray = NDArray[np.float64]
Columns = dict[str, FloatArray]

DESCRIPTIONS = {
    "teff": "effective temperature of the invented stars",
    "mag": "observed magnitude, dust included, of a star of average photosphere",
    "bands": "the bands used",
    "radius": "radius of the invented stars",
    "parallax": "true parallax, median of the stars",
    "stars": "invented stars",
    "not_detected": "share of the stars with fewer than two bands above 3 sigma, which have no result",
    "not_converged": "share of the stars flagged not_converged",
}


class Point(NamedTuple):
    """A point of the grid: what its stars have in common."""

    teff_k: float
    radius_rsun: float
    mag: float
    parallax_error_mas: float

    @property
    def name(self) -> str:
        """What the ids of its stars start with."""
        return f"{self.teff_k!r} K, {self.radius_rsun!r} solRad, {self.mag!r} mag"


@dataclass(frozen=True)
class Survey:
    """What is measured, and how well: error_jy is the flux error of each band, zero_mag_jy that of the brightness."""

    settings: ForecastSettings
    run_settings: Settings
    model: FitModel
    error_jy: FloatArray
    zero_mag_jy: float


def forecast(settings: ForecastSettings, advance: Callable[[int], None] = lambda rows: None) -> Table:
    """Return how precisely T, R and L of invented stars would be known, for each set of bands.

    The data of every star are drawn from the likelihood of the model: errors, floors, zero points, the star's
    common factors and its own scatter, outlying bands; A_V is drawn from its prior. The sets of bands see the same
    stars with the same data. With photosphere = "auto" the stars are calibrated ones; none has jitter.

    Parameters
    ----------
    settings
        The grid, the bands and their errors, the model.
    advance
        Is told how many more of the ``fits_in`` fits are done.

    Returns
    -------
    A row for each set of bands and point of the grid, with units and descriptions.

    Raises
    ------
    SettingsError
        If a passband or zero point is not known, or a star would lie outside the bounds of the distance.
    """
    survey = plan_survey(settings)
    points = grid_points(settings)
    stars = [invent(point, survey) for point in points]
    table = pa.concat_tables([_as_table(point, some, survey) for point, some in zip(points, stars, strict=True)])
    fitted = {
        name: _fit(_only(table, labels, survey), survey, advance)
        for name, labels in settings.forecast.band_sets().items()
    }
    rows = []
    for place, point in enumerate(points):
        of_point = {name: _of_point(place, columns, settings) for name, columns in fitted.items()}
        rows += [_row(name, point, stars[place], mine, of_point[ALL_BANDS]) for name, mine in of_point.items()]
    return _described(rows, settings)


def is_misled(rows: Table | Row, quantity: str) -> Any:
    """Return whether the priors decide: fewer than a third of a point's stars in their 68 % interval, not by chance."""
    share = rows[f"{quantity}_inside_68"]
    n = np.round(rows["stars"] * (1.0 - rows["not_detected"]))
    return (share < MISLED_SHARE) & (binom.cdf(np.round(share * n), n, 0.68) < MISLED_CHANCE)


def fits_in(settings: ForecastSettings) -> int:
    """Return how many fits a forecast takes."""
    return len(grid_points(settings)) * settings.forecast.stars * len(settings.forecast.band_sets())


def grid_points(settings: ForecastSettings) -> list[Point]:
    """Return the points of the grid, temperature by temperature."""
    grid = settings.forecast
    errors = grid.parallax_errors_mas() or [float("nan")] * len(grid.brightness.mag)
    return [
        Point(teff_k, radius_rsun, mag, error)
        for teff_k, radius_rsun in zip(grid.temperature_k, grid.radii_rsun(), strict=True)
        for mag, error in zip(grid.brightness.mag, errors, strict=True)
    ]


def plan_survey(settings: ForecastSettings) -> Survey:
    """Return the model of the survey and the errors of its bands.

    Raises
    ------
    SettingsError
        If a passband, a zero point, the extinction law or the departures are not known or do not fit together.
    """
    run_settings = settings.run_settings()
    try:
        model = build_model(run_settings)
    except SettingsError as error:  # names the key of a run, which has the same bands in the same order
        raise type(error)(str(error).replace("input.photometry", "forecast.band")) from None
    bands, brightness = settings.forecast.band, settings.forecast.brightness
    depth_jy = [
        _flux_jy(model, band.label, band.system, band.depth_mag, f"forecast.band[{place}]")
        for place, band in enumerate(bands)
    ]
    zero_mag_jy = _flux_jy(model, brightness.label, brightness.system, 0.0, "forecast.brightness")
    return Survey(settings, run_settings, model, np.array(depth_jy) / DEPTH_SIGMA, zero_mag_jy)


def _flux_jy(model: FitModel, label: str, system: str, mag: float, key: str) -> float:
    try:
        zero_jy = zero_point_jy(model.passbands[label], "AB" if system == "AB" else "Vega")
    except SettingsError as error:
        raise SettingsError(f"{key}.system: {error}") from None
    return float(zero_jy * np.exp(-LN_FLUX_PER_MAG * mag))


def invent(point: Point, survey: Survey) -> Columns:
    """Return the invented stars of a point: their truth, fluxes (n, b) and parallaxes.

    They depend on the seed, the point and the survey, and on no other point.
    """
    model, settings = survey.model, survey.settings
    n, n_bands = settings.forecast.stars, len(model.floor)
    rng = np.random.default_rng(star_streams([point.name.encode()], settings.run.seed, b"forecast")[0])
    av = draw_extinction(settings.model.extinction, rng.random(n))
    widening = giant_scale(np.array(point.teff_k), np.array(point.radius_rsun))
    tau, gamma = model.off_scale_at(np.log(point.teff_k))
    warmer, brighter = widening * tau * rng.normal(size=n), widening * gamma * rng.normal(size=n)
    ln_band = ln_flux(model.table, point.teff_k * np.exp(-warmer), av)
    reference = list(model.passbands).index(settings.forecast.brightness.label)
    seen_ln_omega = np.log(survey.zero_mag_jy) - LN_FLUX_PER_MAG * point.mag - ln_band[:, reference]
    dist_pc = point.radius_rsun * np.exp(LN_RSUN_PC - 0.5 * (seen_ln_omega + brighter - 4.0 * warmer))
    _check_distance(point, dist_pc, settings)
    shift, scatter = _photosphere(point, model, rng, n)
    true_jy = np.exp(ln_band + seen_ln_omega[:, None] + widening * shift)
    sigma_jy = np.hypot(survey.error_jy, np.hypot(model.floor, widening * scatter) * true_jy)
    outlying = rng.random((n, n_bands)) < model.prior.outlier_fraction
    noise = np.where(outlying, model.prior.outlier_width, 1.0) * rng.normal(size=(n, n_bands))
    return {
        "teff": np.full(n, point.teff_k),
        "radius": np.full(n, point.radius_rsun),
        "lum": np.exp(LN_LUM_COEFFICIENT + 2.0 * np.log(point.radius_rsun) + 4.0 * np.log(np.full(n, point.teff_k))),
        "av": av,
        "true_parallax": 1e3 / dist_pc,
        "flux_jy": true_jy + sigma_jy * noise,
        "parallax": 1e3 / dist_pc + point.parallax_error_mas * rng.normal(size=n),
    }


def draw_extinction(extinction: Extinction, chance: FloatArray) -> FloatArray:
    """Return A_V [mag] at cumulative probabilities of its prior, truncated to [0, max]."""
    mean, scale = float(extinction.mean), float(extinction.scale)
    if extinction.prior == "fixed":
        return np.full(len(chance), mean)
    if extinction.prior == "exponential":
        av = -scale * np.log1p(chance * np.expm1(-extinction.max / scale))
    else:
        low, high = ndtr(-mean / scale), ndtr((extinction.max - mean) / scale)
        av = mean + scale * ndtri(low + chance * (high - low))
    return np.clip(av, 0.0, extinction.max)


def _photosphere(
    point: Point, model: FitModel, rng: np.random.Generator, n: int
) -> tuple[FloatArray, FloatArray | float]:
    """Return each dwarf's common departure (n, b) from the mean photosphere, and the scatter (b,) that is its own."""
    if model.departures is None:
        return np.zeros((n, 1)), 0.0
    at = model.departures.at(point.teff_k)
    z = rng.normal(size=(n, len(at.loading)))
    shift = (z[:, :, None] * at.loading[None, :, :, 0]).sum(axis=1)
    return shift, at.scatter[:, 0]


def _check_distance(point: Point, dist_pc: FloatArray, settings: ForecastSettings) -> None:
    low, high = settings.model.distance.bounds_pc
    if dist_pc.min() < low or dist_pc.max() > high:
        raise SettingsError(
            f"forecast.brightness.mag: a star of {point.teff_k:g} K and {point.radius_rsun:g} solar radii at "
            f"{point.mag:g} mag lies at {np.median(dist_pc):.3g} pc, beyond model.distance.bounds_pc: leave it out"
        )


def _as_table(point: Point, stars: Columns, survey: Survey) -> pa.Table:
    """Return stars as the table that a run would read."""
    n = len(stars["av"])
    columns: dict[str, Any] = {"id": [f"{point.name}, star {star}" for star in range(n)]}
    for place, label in enumerate(survey.model.passbands):
        columns[f"flux_{label}"] = stars["flux_jy"][:, place]
        columns[f"error_{label}"] = np.full(n, survey.error_jy[place])
    if survey.run_settings.input.parallax is not None:
        columns |= {"parallax": stars["parallax"], "parallax_error": np.full(n, point.parallax_error_mas)}
    columns |= {"_input_file": ["forecast"] * n, "_input_row": np.arange(n), "_duplicate": np.zeros(n, np.int8)}
    return pa.table(columns)


def _only(table: pa.Table, labels: list[str], survey: Survey) -> pa.Table:
    """Return the table with the fluxes of other bands missing."""
    missing = pa.nulls(table.num_rows, pa.float64())
    for label in survey.model.passbands:
        if label not in labels:
            place = table.column_names.index(f"flux_{label}")
            table = table.set_column(place, f"flux_{label}", missing)
    return table


def _fit(table: pa.Table, survey: Survey, advance: Callable[[int], None]) -> dict[str, NDArray[Any]]:
    """Return the intervals and flags of every row; NaN where there is none."""
    names = [f"{quantity}_{end}" for quantity in QUANTITIES for end in ("lo68", "p50", "hi68")]
    parts = []
    for first in range(0, table.num_rows, ROWS_AT_ONCE):
        part = table.slice(first, ROWS_AT_ONCE)
        parts.append(process_part(part, survey.run_settings, survey.model).catalogue.select([*names, "flags"]))
        advance(part.num_rows)
    catalogue = pa.concat_tables(parts)
    return {name: catalogue[name].to_numpy() for name in catalogue.column_names}


def _of_point(place: int, fitted: dict[str, NDArray[Any]], settings: ForecastSettings) -> dict[str, NDArray[Any]]:
    n = settings.forecast.stars
    return {name: values[place * n : (place + 1) * n] for name, values in fitted.items()}


def _row(
    name: str, point: Point, stars: Columns, fitted: dict[str, NDArray[Any]], with_all: dict[str, NDArray[Any]]
) -> dict[str, Any]:
    """Return what a set of bands makes of the stars of a point, beside what all bands make of them."""
    row: dict[str, Any] = {
        "teff": point.teff_k,
        "mag": point.mag,
        "bands": name,
        "radius": point.radius_rsun,
        "parallax": float(np.median(stars["true_parallax"])),
        "stars": len(stars["av"]),
    }
    for quantity in QUANTITIES:
        width = _half_width(fitted, quantity)
        row[f"{quantity}_half_width"] = _median(width)
        row[f"{quantity}_ratio"] = _median(width / _half_width(with_all, quantity))
        row[f"{quantity}_inside_68"] = _share_inside(fitted, quantity, stars[quantity])
        row[f"{quantity}_bias"] = _median(fitted[f"{quantity}_p50"] / stars[quantity] - 1.0)
    for flag, column in (("no_detection", "not_detected"), ("not_converged", "not_converged")):
        row[column] = float(np.mean((fitted["flags"] & BY_NAME[flag].value) != 0))
    return row


def _half_width(fitted: dict[str, NDArray[Any]], quantity: str) -> FloatArray:
    low, middle, high = (fitted[f"{quantity}_{end}"].astype(np.float64) for end in ("lo68", "p50", "hi68"))
    return np.asarray(0.5 * (high - low) / middle)


def _share_inside(fitted: dict[str, NDArray[Any]], quantity: str, truth: FloatArray) -> float:
    low, high = fitted[f"{quantity}_lo68"], fitted[f"{quantity}_hi68"]
    seen = np.isfinite(low)
    return float(np.mean((low < truth) & (truth < high), where=seen)) if seen.any() else float("nan")


def _median(values: FloatArray) -> float:
    seen = values[np.isfinite(values)]
    return float(np.median(seen)) if len(seen) else float("nan")


def _described(rows: list[dict[str, Any]], settings: ForecastSettings) -> Table:
    """Return rows as a table with units and descriptions; what it was made from is in its meta."""
    table = Table({name: [row[name] for row in rows] for name in rows[0]})
    units = {"teff": u.K, "mag": u.mag, "radius": u.R_sun, "parallax": u.mas}
    for name, unit in units.items():
        table[name].unit = unit
    descriptions = dict(DESCRIPTIONS)
    for quantity in QUANTITIES:
        descriptions |= {
            f"{quantity}_half_width": f"half of {quantity}_hi68 - {quantity}_lo68 over {quantity}_p50, median",
            f"{quantity}_inside_68": "share of the stars with a result that lie in their 68 % interval",
            f"{quantity}_bias": f"{quantity}_p50 over the truth, less one, median",
            f"{quantity}_ratio": f"half-width over the same star's with bands = {ALL_BANDS}, median",
        }
    for name, text in descriptions.items():
        table[name].description = text
    brightness = settings.forecast.brightness
    table.meta = {
        "name": settings.run.name,
        "mag": f"{brightness.label} [{brightness.system} mag]",
        "starkiln": __version__,
        "method": METHOD_VERSION,
        "settings": settings.model_dump(mode="json", exclude_none=True, exclude={"run": {"output"}}),
    }
    return table

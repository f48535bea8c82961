"""From columns to what a fit needs: fluxes in Jy, parallaxes in mas, priors; other rows are rejected."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa
from astropy import units as u
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp_array
from starkiln.physics.passbands import Passband, zero_point_jy
from starkiln.settings import Settings
from starkiln.settings.models import PhotometryColumns
from starkiln.stages.stars import Stars
from starkiln.tables.columns import output_fields, rejected_schema
from starkiln.tables.hashes import canonical_ids, float64_values, marked

if TYPE_CHECKING:
    from starkiln.stages.model import FitModel

LN_FLUX_PER_MAG = 0.4 * np.log(10.0)
"""Relative change of a flux per magnitude: f = F0 * 10**(-0.4 m)."""

MAG_PLACEHOLDER = 50.0
"""No star is this bright (negative) or faint; values beyond are placeholders such as 99 or -999."""

_USABLE, _BAD, _NO_VALUE, _PLACEHOLDER, _NO_ERROR, _ERROR_NOT_POSITIVE, _OUT_OF_RANGE = range(7)

RANGE = 1e30
"""Fluxes above this and errors beyond it or its inverse, in Jy, are placeholders or garbage."""
SHARPEST = 1e12
"""No measurement is this many times its error."""

_NOT_REJECTED = -1

QUIETLY = np.errstate(over="ignore", invalid="ignore")
"""What overflows on the way to our units is infinite or NaN, and left out for it: no news for standard error."""


@dataclass(frozen=True)
class Ingested:
    """What became of the rows of a table.

    Attributes
    ----------
    stars
        The rows that can be fitted.
    kept
        Their id, carried columns, `_input_file`, `_input_row` and, where given, `_duplicate`; in input order.
    rejected
        The other rows, as `rejected_schema` lays down; in input order.
    is_kept
        For each row of the table, whether it is kept.
    """

    stars: Stars
    kept: pa.Table
    rejected: pa.Table
    is_kept: NDArray[np.bool_]


@dataclass(frozen=True)
class BandValues:
    """One band of n rows; `fault` says why a row's value cannot be used, 0 where it can."""

    flux_jy: NDArray[np.float64]
    error_jy: NDArray[np.float64]
    limit: NDArray[np.bool_]
    fault: NDArray[np.int8]


@dataclass(frozen=True)
class Rejection:
    """Rows turned down for one reason, with the text for each."""

    rows: NDArray[np.bool_]
    reason: str
    details: Sequence[str]
    detail_of: NDArray[np.intp] | None = None

    def detail(self, row: int) -> str:
        """Return the text of a row."""
        return self.details[0 if self.detail_of is None else self.detail_of[row]]


def ingest(table: pa.Table, settings: Settings, model: FitModel) -> Ingested:
    """Turn the rows of a table into stars, and set aside those that cannot be fitted.

    A band is left out of a row where it is marked bad, where its value or error is missing (null, NaN,
    infinite, or a magnitude beyond `MAG_PLACEHOLDER`), and where its error is not positive. A row is rejected
    that has no id, repeats an earlier one (`_duplicate` = 2), lacks a usable prior parameter, or keeps fewer
    than `min_bands` bands.

    Parameters
    ----------
    table
        n rows: the columns that the settings use, `_input_file`, `_input_row` and, if known, `_duplicate`.
    settings
        Say what the columns mean.
    model
        Gives the passband of each label.
    """
    bands = [read_band(table, band, model.passbands[band.label]) for band in settings.input.photometry]
    fault = np.stack([band.fault for band in bands], axis=1)
    limit = np.stack([band.limit for band in bands], axis=1)
    priors = _prior_parameters(table, settings)
    ids = canonical_ids(table[settings.input.id])

    rejections = [
        _without_id(ids, settings),
        _repeated(table, settings),
        *_without_prior(priors, settings),
        _short_of_bands(fault, settings),
    ]
    first = np.full(table.num_rows, _NOT_REJECTED)
    for number in reversed(range(len(rejections))):
        first[rejections[number].rows] = number
    kept = first == _NOT_REJECTED

    parallax, parallax_error = _parallax_mas(table, settings)
    distance, distance_error = _distance_pc(table, settings)
    usable = fault[kept] == _USABLE
    stars = Stars(
        ids=[star_id for star_id, keep in zip(ids, kept.tolist(), strict=True) if keep and star_id is not None],
        flux_jy=np.where(usable, np.stack([band.flux_jy for band in bands], axis=1)[kept], 0.0),
        error_jy=np.where(usable, np.stack([band.error_jy for band in bands], axis=1)[kept], 1.0),
        usable=usable,
        limit=limit[kept] & usable,
        parallax_mas=parallax[kept],
        parallax_error_mas=parallax_error[kept],
        distance_pc=distance[kept],
        distance_error_pc=distance_error[kept],
        **{name: values[kept] for name, values in priors.items()},
    )
    rejected = _rejected_rows(table, settings, first, rejections)
    return Ingested(stars, _kept_rows(table, settings, kept), rejected, kept)


@QUIETLY
def read_band(table: pa.Table, band: PhotometryColumns, passband: Passband) -> BandValues:
    """Return one band's fluxes and errors in Jy, its limits, and why a value cannot be used."""
    value, error = float64_values(table[band.value]), float64_values(table[band.error])
    limit = _marks(table, band.limit)
    no_value = ~np.isfinite(value)
    placeholder = ~no_value & (band.unit == "mag") & (np.abs(value) > MAG_PLACEHOLDER)
    value = np.where(no_value | placeholder, 0.0, value)
    flux_jy, error_jy = _to_jy(value, error, band, passband)
    no_error = ~np.isfinite(error_jy)
    not_positive = ~no_error & (error_jy <= 0)
    at_sigma = limit & (no_error | not_positive) & (flux_jy > 0)
    error_jy = np.where(at_sigma, flux_jy / band.limit_sigma, error_jy)
    fault = np.select(
        [
            _marks(table, band.bad),
            no_value,
            placeholder,
            no_error & ~at_sigma,
            not_positive & ~at_sigma,
            ~_sane(flux_jy, error_jy),
        ],
        [_BAD, _NO_VALUE, _PLACEHOLDER, _NO_ERROR, _ERROR_NOT_POSITIVE, _OUT_OF_RANGE],
        _USABLE,
    ).astype(np.int8)
    return BandValues(flux_jy, error_jy, limit, fault)


def _sane(value: NDArray[np.float64], error: NDArray[np.float64]) -> NDArray[np.bool_]:
    return (np.abs(value) <= RANGE) & (error >= 1.0 / RANGE) & (error <= RANGE) & (np.abs(value) / SHARPEST <= error)


def _marks(table: pa.Table, column: str | None) -> NDArray[np.bool_]:
    return np.zeros(table.num_rows, bool) if column is None else marked(table[column])


def _to_jy(
    value: NDArray[np.float64], error: NDArray[np.float64], band: PhotometryColumns, passband: Passband
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    if band.system is not None:
        return magnitudes_to_jy(value, error, band.zero_point_jy or zero_point_jy(passband, band.system))
    factor = jy_per_unit(band.unit, passband.pivot_um)
    return value * factor, error * factor


def magnitudes_to_jy(
    mag: NDArray[np.float64], mag_error: NDArray[np.float64], zero_flux_jy: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return flux densities and their errors: f = F0 10**(-0.4 m), error = 0.4 ln(10) f error_m.

    Parameters
    ----------
    mag, mag_error
        (n,), finite magnitudes and their errors.
    zero_flux_jy
        Flux density of magnitude zero.
    """
    flux_jy = zero_flux_jy * exp_array(-LN_FLUX_PER_MAG * mag)
    return flux_jy, LN_FLUX_PER_MAG * flux_jy * mag_error


def jy_per_unit(unit: str, pivot_um: float) -> float:
    """Return the factor from a unit of flux density to Jy.

    Per wavelength, f_nu = f_lambda * pivot**2 / c: exact, as it is what defines the pivot wavelength of a
    passband (Tokunaga & Vacca 2005, PASP 117, 421, from memory).
    """
    return float((1.0 * u.Unit(unit)).to_value(u.Jy, u.spectral_density(pivot_um * u.um)))


@QUIETLY
def _parallax_mas(table: pa.Table, settings: Settings) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return parallax minus zero point and scaled error in mas; both NaN where either cannot be used."""
    columns = settings.input.parallax
    if columns is None:
        return np.full(table.num_rows, np.nan), np.full(table.num_rows, np.nan)
    to_mas = u.Unit(columns.unit).to(u.mas)
    value = float64_values(table[columns.value]) - number_or_column(table, columns.zero_point)
    error = float64_values(table[columns.error]) * number_or_column(table, columns.error_scale)
    return _measured(value * to_mas, error * to_mas)


@QUIETLY
def _distance_pc(table: pa.Table, settings: Settings) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return distance and error in pc; both NaN where either cannot be used."""
    columns = settings.input.distance
    if columns is None:
        return np.full(table.num_rows, np.nan), np.full(table.num_rows, np.nan)
    to_pc = u.Unit(columns.unit).to(u.pc)
    value = float64_values(table[columns.value]) * to_pc
    error = float64_values(table[columns.error]) * to_pc
    return _measured(np.where(value > 0, value, np.nan), error)


def _measured(
    value: NDArray[np.float64], error: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    usable = _sane(value, error)
    return np.where(usable, value, np.nan), np.where(usable, error, np.nan)


def number_or_column(table: pa.Table, setting: float | str) -> NDArray[np.float64]:
    """Return (n,) values of a setting that is a number or names a column; NaN where the column is null."""
    if isinstance(setting, str):
        return float64_values(table[setting])
    return np.full(table.num_rows, float(setting))


def _prior_parameters(table: pa.Table, settings: Settings) -> dict[str, NDArray[np.float64]]:
    extinction = settings.model.extinction
    return {
        "av_mean": number_or_column(table, extinction.mean),
        "av_scale": number_or_column(table, extinction.scale),
        "length_scale_pc": number_or_column(table, settings.model.distance.length_scale_pc),
    }


def _without_id(ids: list[bytes | None], settings: Settings) -> Rejection:
    missing = np.array([star_id is None for star_id in ids], bool)
    return Rejection(missing, "no id", [f"column {settings.input.id!r} is null or empty"])


def _repeated(table: pa.Table, settings: Settings) -> Rejection:
    if "_duplicate" not in table.column_names:
        later = np.zeros(table.num_rows, bool)
    else:
        later = table["_duplicate"].to_numpy() == 2
    return Rejection(later, "duplicate id", [f"an earlier row has the same {settings.input.id!r}"])


def _without_prior(priors: dict[str, NDArray[np.float64]], settings: Settings) -> list[Rejection]:
    """Return the rows whose prior parameters, read from columns, are missing or out of range."""
    extinction, distance = settings.model.extinction, settings.model.distance
    mean, scale, length = priors["av_mean"], priors["av_scale"], priors["length_scale_pc"]
    if extinction.prior == "fixed":
        mean_is_good = (mean >= 0) & (mean <= extinction.max)
        mean_range = f"between 0 and model.extinction.max = {extinction.max:g}"
    else:
        mean_is_good, mean_range = np.isfinite(mean), "a number"
    checks = [
        (extinction.mean, mean_is_good, mean_range),
        (extinction.scale, np.isfinite(scale) & (scale > 0), "positive"),
        (distance.length_scale_pc, np.isfinite(length) & (length > 0), "positive"),
    ]
    return [
        Rejection(~good, "no prior", [f"column {setting!r} is missing or not {wanted}"])
        for setting, good, wanted in checks
        if isinstance(setting, str)
    ]


def _short_of_bands(fault: NDArray[np.int8], settings: Settings) -> Rejection:
    """Return the rows with too few usable bands; rows with the same faults share one text."""
    needed = settings.input.min_bands
    short = (fault == _USABLE).sum(axis=1) < needed
    patterns, pattern_of = np.unique(fault[short], axis=0, return_inverse=True)
    detail_of = np.zeros(len(fault), np.intp)
    detail_of[short] = pattern_of.reshape(-1)
    texts = [_fault_text(pattern, settings.input.photometry, needed) for pattern in patterns]
    return Rejection(short, "too few bands", texts, detail_of)


def _fault_text(pattern: NDArray[np.int8], bands: Sequence[PhotometryColumns], needed: int) -> str:
    faults = [fault_words(fault, band) for band, fault in zip(bands, pattern.tolist(), strict=True) if fault]
    return f"{len(bands) - len(faults)} usable of {needed} needed: {', '.join(faults)}"


def fault_words(fault: int, band: PhotometryColumns) -> str:
    """Return in words why a band's value cannot be used, by the `fault` of its `BandValues`; nothing where it can."""
    told = {
        _USABLE: "",
        _BAD: "{0.bad} is true",
        _NO_VALUE: "{0.value} has no value",
        _PLACEHOLDER: "{0.value} is a placeholder",
        _NO_ERROR: "{0.error} has no value",
        _ERROR_NOT_POSITIVE: "{0.error} is not positive",
        _OUT_OF_RANGE: "{0.value} or {0.error} is out of range",
    }
    return told[fault].format(band)


def _kept_rows(table: pa.Table, settings: Settings, kept: NDArray[np.bool_]) -> pa.Table:
    names = [settings.input.id, *settings.input.carry, "_input_file", "_input_row"]
    if "_duplicate" in table.column_names:
        names.append("_duplicate")
    return table.select(names).filter(pa.array(kept))


def _rejected_rows(
    table: pa.Table, settings: Settings, first: NDArray[np.int_], rejections: list[Rejection]
) -> pa.Table:
    rows = np.flatnonzero(first != _NOT_REJECTED)
    why = [rejections[number] for number in first[rows].tolist()]
    origin = table.select([settings.input.id, "_input_file", "_input_row"]).take(pa.array(rows))
    columns = [
        *origin.columns,
        pa.array([rejection.reason for rejection in why], pa.string()),
        pa.array([rejection.detail(row) for rejection, row in zip(why, rows.tolist(), strict=True)], pa.string()),
        pa.array(["data"] * len(rows), pa.string()),
    ]
    schema = rejected_schema(output_fields(table.schema, settings)[0])
    return pa.table(columns, names=schema.names).cast(schema)

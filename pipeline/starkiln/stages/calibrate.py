"""Learning departures from a table of reference stars, and testing them on the half they were not learnt from."""

from __future__ import annotations

import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from starkiln.calibration.individual import Learnt, ReferenceStars, TooFewStars, learn_departures, with_figures
from starkiln.errors import InputError, SettingsError
from starkiln.physics.bandtable import ln_flux
from starkiln.physics.constants import MAS_PER_RAD, PARSEC_M, RSUN_M, TSUN_K
from starkiln.physics.departures import Departures, write_departures
from starkiln.physics.planck import bolometric_exitance
from starkiln.settings import Settings
from starkiln.settings.models import Calibrate
from starkiln.stages.bands import Bands, build_bands
from starkiln.stages.ingest import ingest, number_or_column
from starkiln.stages.model import FitModel, build_model
from starkiln.stages.process import process_part
from starkiln.stages.stars import Stars
from starkiln.tables.hashes import float64_values, id_hashes, marked


@dataclass(frozen=True)
class Calibration:
    """What a table of reference stars taught.

    Attributes
    ----------
    learnt
        Departures of all stars, with the points behind them.
    teff_k
        (n,), the stars' temperatures.
    figures
        By quantity ("teff", "fbol", and "radius", "lum" where a radius is given): median offset, robust scatter and
        coverage on the held-out stars.
    """

    learnt: Learnt
    teff_k: NDArray[np.float64]
    figures: dict[str, dict[str, float]]


def calibrate(table: pa.Table, settings: Settings) -> Calibration:
    """Learn departures from reference stars.

    Parameters
    ----------
    table
        The rows of the input with the columns of the settings, those of [calibrate] among the carried ones,
        ``_input_file``, ``_input_row`` and ``_duplicate``.

    Raises
    ------
    SettingsError
        If a passband is used twice.
    InputError
        If too few rows can be used.
    """
    section = section_of(settings)
    blackbody = with_model(settings, photosphere="blackbody")
    bands = build_bands(blackbody)
    names = [passband.name for passband in bands.passbands.values()]
    if len(set(names)) < len(names):
        raise SettingsError("input.photometry: `starkiln calibrate` takes each passband once: leave one of them out")
    if section.good is not None:
        table = table.filter(pa.array(marked(table[section.good])))
    model = build_model(blackbody)
    ingested = ingest(table, blackbody, model)
    rows = table.filter(pa.array(ingested.is_kept))
    stars, known = reference_stars(rows, ingested.stars, bands, settings)
    if known.sum() == 0:
        raise InputError("no row has a temperature, a size and enough bands: see [calibrate] in the settings")
    rows, stars = rows.filter(pa.array(known)), stars.only(known)
    n_factors = None if section.factors == "auto" else section.factors
    passbands = list(bands.passbands.values())
    facts = {"tables": Path(settings.input.tables).name, "name": settings.run.name}
    training = _in_training(rows, settings, section.train)
    try:
        half = learn_departures(passbands, stars.only(training), n_factors, facts)
        others = ~training
        figures = held_out_figures(rows.filter(pa.array(others)), stars.only(others), half.departures, settings)
        learnt = learn_departures(passbands, stars, n_factors, facts)
    except TooFewStars as error:
        raise InputError(f"{settings.input.tables}: {error}") from None
    complete = Learnt(with_figures(learnt.departures, figures), learnt.points, learnt.errors, learnt.factor_scores)
    return Calibration(complete, stars.teff_k, figures)


def section_of(settings: Settings) -> Calibrate:
    """Return the section [calibrate].

    Raises
    ------
    SettingsError
        If there is none.
    """
    if settings.calibrate is None:
        raise SettingsError("calibrate is missing: add a [calibrate] section, see configs/template.toml")
    return settings.calibrate


def carrying_references(settings: Settings) -> Settings:
    """Return the settings with the columns of the reference stars among the carried ones."""
    carry = list(dict.fromkeys([*settings.input.carry, *section_of(settings).columns()]))
    return settings.model_copy(update={"input": settings.input.model_copy(update={"carry": carry})})


def with_model(settings: Settings, **values: Any) -> Settings:
    """Return the settings with some keys of [model] replaced."""
    return settings.model_copy(update={"model": settings.model.model_copy(update=values)})


def reference_stars(
    rows: pa.Table, stars: Stars, bands: Bands, settings: Settings
) -> tuple[ReferenceStars, NDArray[np.bool_]]:
    """Return the rows as reference stars, their fluxes freed of dust, and which of them can be used."""
    section = section_of(settings)
    coolest_k, hottest_k = settings.model.temperature_k
    teff_k = float64_values(rows[section.teff])
    with np.errstate(invalid="ignore", divide="ignore"):
        ln_omega = _ln_omega(rows, stars, teff_k, section)
        av = number_or_column(rows, section.av)
        known = np.isfinite(ln_omega) & (teff_k >= coolest_k) & (teff_k <= hottest_k)
        known &= (av >= 0.0) & (av <= settings.model.extinction.max)
        measured = stars.usable & ~stars.limit & (stars.flux_jy > 5.0 * stars.error_jy)
        flux = np.where(measured, np.log(np.abs(stars.flux_jy) + 1e-300), np.nan)
        error = np.where(measured, stars.error_jy / stars.flux_jy, np.nan)
    safe_k, safe_av = np.where(known, teff_k, 5000.0), np.where(known, av, 0.0)
    dust = ln_flux(bands.table, safe_k, safe_av) - ln_flux(bands.table, safe_k, 0.0)
    return ReferenceStars(teff_k, ln_omega, flux - dust, error), known


def _ln_omega(rows: pa.Table, stars: Stars, teff_k: NDArray[np.float64], section: Calibrate) -> NDArray[np.float64]:
    """Return ln (R/d)², from whichever size the reference stars have."""
    if section.angular_diameter is not None:
        return 2.0 * np.log(0.5 * float64_values(rows[section.angular_diameter]) / MAS_PER_RAD)
    if section.fbol is not None:
        return np.log(float64_values(rows[section.fbol]) / bolometric_exitance(teff_k))
    distance_pc = np.where(np.isfinite(stars.distance_pc), stars.distance_pc, 1e3 / stars.parallax_mas)
    distance_pc = np.where(distance_pc > 0.0, distance_pc, np.nan)
    return 2.0 * np.log(float64_values(rows[section.radius]) * RSUN_M / (distance_pc * PARSEC_M))


def _in_training(rows: pa.Table, settings: Settings, share: float) -> NDArray[np.bool_]:
    """Return which stars to learn from, by a hash of their ids: no order of rows matters."""
    hashes, _ = id_hashes(rows[settings.input.id])
    rank = np.argsort(np.argsort(hashes))
    return np.asarray(rank < share * len(rank))


def held_out_figures(
    rows: pa.Table, stars: ReferenceStars, departures: Departures, settings: Settings
) -> dict[str, dict[str, float]]:
    """Fit held-out stars with departures, and return how their temperatures, fluxes and radii come out."""
    section = section_of(settings)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "departures.ecsv"
        write_departures(departures, path)
        fitting = with_model(settings, photosphere="calibrated", departures=path)
        model: FitModel = build_model(fitting)
    catalogue = process_part(rows, fitting, model).catalogue
    truth = {"teff": stars.teff_k, "fbol": np.exp(stars.ln_omega) * bolometric_exitance(stars.teff_k)}
    if section.radius is not None:
        truth["radius"] = float64_values(catalogue[section.radius])
        truth["lum"] = truth["radius"] ** 2 * (stars.teff_k / TSUN_K) ** 4
    return {name: _figures(catalogue, name, values) for name, values in truth.items()}


def _figures(catalogue: pa.Table, name: str, truth: NDArray[np.float64]) -> dict[str, float]:
    quantile = {q: float64_values(catalogue[f"{name}_{q}"]) for q in ("lo95", "lo68", "p50", "hi68", "hi95")}
    known = np.isfinite(quantile["p50"]) & np.isfinite(truth)
    ratio = np.log(quantile["p50"][known] / truth[known])
    inside = {level: (quantile[f"lo{level}"] < truth) & (truth < quantile[f"hi{level}"]) for level in ("68", "95")}
    middle = float(np.median(ratio)) if known.any() else np.nan
    return {
        "stars": int(known.sum()),
        "median": round(middle, 5),
        "scatter": round(1.4826 * float(np.median(np.abs(ratio - middle))), 5) if known.any() else np.nan,
        "inside_68": round(float(inside["68"][known].mean()), 4) if known.any() else np.nan,
        "inside_95": round(float(inside["95"][known].mean()), 4) if known.any() else np.nan,
    }
